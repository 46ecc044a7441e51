"""Signal computation: bilinear transform, running step, oversampling, the stage as a block."""

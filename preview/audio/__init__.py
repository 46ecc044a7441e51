"""Sound in and out: files, pipes, devices and the silent clock. Samples, full scale 1.0."""

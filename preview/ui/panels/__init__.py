"""The parts of the desk's screen."""

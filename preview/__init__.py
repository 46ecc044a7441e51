"""Preview: hear an op-amp stage on your own signal before you build it, in volts, in real time."""

__all__ = ["__version__"]

__version__ = "0.1.0"

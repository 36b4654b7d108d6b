"""A wire contract for robot modules, and a bench that judges any build against it."""

__version__ = "0.1.0"

"""Heading-field guidance for small wheeled robots, and its retuning on the real robot."""

__version__ = "0.1.0"

"""The version of the program, read by the build and printed with every result."""

__version__ = "0.1.0"

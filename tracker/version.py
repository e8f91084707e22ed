"""The version of the program, noted beside what it makes."""

__version__ = "0.1.0"

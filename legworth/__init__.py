"""What people run: the command line, and the recipes behind it."""

__version__ = "0.1.0"

__all__ = ["__version__"]

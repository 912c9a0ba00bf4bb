"""The version, where it costs nothing to read."""

__all__ = ["__version__"]

__version__ = "0.1.0"

"""The version of the package, for everything that writes it down."""

__version__ = "0.1.0"

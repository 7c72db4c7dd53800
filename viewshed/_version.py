"""Version of the package, read by the build and by every record."""

__version__ = "0.3.0"

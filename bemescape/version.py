"""The version, as installed."""

from importlib.metadata import version

__all__ = ["__version__"]

__version__ = version("bemescape")

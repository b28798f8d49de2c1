"""Histories of rock uplift, with their uncertainty, from river long profiles."""

from importlib.metadata import version as _version

__version__ = _version("fluvinv")

__all__ = ["__version__"]

"""Global fits of dark-matter models: several searches taken together, as posterior and as profile likelihood."""

from importlib.metadata import version

__version__ = version("scanfit")

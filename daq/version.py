"""The version that goes into every record."""

from importlib.metadata import version

VERSION = version("midspan")

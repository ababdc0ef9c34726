"""The version, from the installed package."""

from importlib.metadata import PackageNotFoundError, version

try:
    __version__ = version("driblet")
except PackageNotFoundError:  # a checkout on the path that was never installed
    __version__ = "0+unknown"

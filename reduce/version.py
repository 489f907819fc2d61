"""The installed version of the distribution."""

from importlib.metadata import PackageNotFoundError
from importlib.metadata import version as installed


def version() -> str:
    """Version of the installed distribution, ``0+unknown`` from an uninstalled checkout."""
    try:
        return installed("fadeline")
    except PackageNotFoundError:
        return "0+unknown"

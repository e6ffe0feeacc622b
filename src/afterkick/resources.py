"""Where the data files that travel with the package are."""

from pathlib import Path

from afterkick.errors import Lacking

__all__ = ["resource_folder"]


def resource_folder(name: str) -> Path:
    """The folder ``templates`` or ``targets``: in the package of a wheel, at the top of a checkout otherwise.

    :raises Lacking: where the installation has lost it.
    """
    package = Path(__file__).resolve().parent
    for folder in (package / name, package.parents[1] / name):
        if folder.is_dir():
            return folder
    raise Lacking(f"this installation has no folder {name}; install the package again")

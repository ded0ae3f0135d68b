"""Where the data that comes with the program lies: rule sheets, report templates, sample logs."""

from __future__ import annotations

from functools import cache
from pathlib import Path


@cache
def shipped(folder: str) -> Path:
    """Folder of shipped data: inside the installed package, else beside it in a checkout.

    Parameters
    ----------
    folder : str
        "rules", "reports" or "sample_logs".

    Raises
    ------
    FileNotFoundError
        If the installation is incomplete.
    """
    package = Path(__file__).resolve().parent.parent
    for place in (package / folder, package.parent / folder):
        if place.is_dir():
            return place
    raise FileNotFoundError(f"The installation lacks its folder {folder!r}; install it again.")

"""Where the files that travel with the package lie: `models/` and `jobs/`, installed from a wheel or editable."""

from __future__ import annotations

from pathlib import Path


def shipped_folder(name: str) -> Path:
    """Find a folder that is shipped with the package.

    Parameters
    ----------
    name : str
        ``models`` or ``jobs``.

    Returns
    -------
    Path
        Inside the package for a wheel, beside it for an editable install.
    """
    package = Path(__file__).resolve().parent
    inside = package / name
    return inside if inside.is_dir() else package.parent / name

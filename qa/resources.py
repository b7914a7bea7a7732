"""Where the files that travel with the program lie: `templates/` and `phantoms/`.

In a clone they stand at the top level; the wheel carries them inside the package, under `qa/shipped`.
"""

from importlib.resources import files
from pathlib import Path

__all__ = ["shipped_folder"]


def shipped_folder(name: str) -> Path:
    """Return the folder `templates` or `phantoms`, in a clone and in an installed copy alike.

    Parameters
    ----------
    name : str
        The folder's name.

    Returns
    -------
    pathlib.Path
        The folder on disk.

    Raises
    ------
    FileNotFoundError
        The installation is incomplete.
    """
    package = Path(str(files("qa")))
    for folder in (package / "shipped" / name, package.parent / name):
        if folder.is_dir():
            return folder
    raise FileNotFoundError(f"The folder {name!r} did not come with this copy of evenfield: install it again.")

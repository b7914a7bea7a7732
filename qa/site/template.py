"""Start a department folder: its sub-folders and a commented, worked site.toml."""

from importlib.resources import files
from pathlib import Path

from qa.errors import FaultError, UsageError
from qa.site.load import FILE_NAME

__all__ = ["SUBFOLDERS", "write_site_template"]

SUBFOLDERS = ("inbox", "archive", "refused", "reports")


def write_site_template(folder: Path) -> Path:
    """Make a department folder with a worked example of site.toml.

    Parameters
    ----------
    folder : pathlib.Path
        Made where it does not exist; other files in it are left alone.

    Returns
    -------
    pathlib.Path
        The new site.toml.

    Raises
    ------
    UsageError
        There is a site.toml already, or a file where a folder should be.
    FaultError
        The folder cannot be written to.
    """
    folder = Path(folder)
    path = folder / FILE_NAME
    if path.exists():
        raise UsageError(f"{path}: there is one already, and it was left as it is: edit it, or choose another folder.")
    text = files("qa.site").joinpath("example.toml").read_text("utf-8")
    try:
        for name in SUBFOLDERS:
            (folder / name).mkdir(parents=True, exist_ok=True)
        with path.open("x", encoding="utf-8", newline="\n") as file:
            file.write(text)
    except (FileExistsError, NotADirectoryError) as error:
        raise UsageError(f"{error.filename}: is not a folder: choose another place.") from None
    except OSError as error:
        raise FaultError(f"{folder}: cannot be written to ({error.strerror}): check permissions and space.") from error
    return path

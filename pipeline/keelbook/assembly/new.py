"""`keelbook new`: a first assembly, commented, with small invented sources, that assembles as it stands."""

from importlib import resources
from importlib.resources.abc import Traversable
from pathlib import Path

from keelbook.errors import DeclarationError, Problem


def write_new(folder: Path) -> list[Path]:
    """Write the first assembly into a folder that does not exist or is empty.

    Returns:
        the files written, sorted.

    Raises:
        DeclarationError: the folder holds something already, or is a file; nothing is written.
    """
    if folder.exists() and not folder.is_dir():
        raise DeclarationError(
            Problem(
                "not a folder",
                str(folder),
                found="a file",
                expected="a new folder",
                remedy="choose another name",
            )
        )
    if folder.is_dir() and (held := sorted(path.name for path in folder.iterdir())):
        raise DeclarationError(
            Problem(
                "the folder is not empty",
                str(folder),
                found=", ".join(held[:3]) + (", ..." if len(held) > 3 else ""),
                expected="a new or an empty folder",
                remedy="choose another name",
            )
        )
    return sorted(_copy(resources.files("keelbook.assembly") / "template", folder))


def _copy(source: Traversable, target: Path) -> list[Path]:
    target.mkdir(parents=True, exist_ok=True)
    written = []
    for entry in source.iterdir():
        if entry.is_dir():
            written += _copy(entry, target / entry.name)
        else:
            (target / entry.name).write_bytes(entry.read_bytes())
            written.append(target / entry.name)
    return written

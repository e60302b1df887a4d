"""Where the shipped `schemas/` and `rules/` folders are: the only code that knows."""

from importlib import resources
from pathlib import Path
from typing import Literal


def folder(kind: Literal["schemas", "rules"]) -> Path:
    """Return the shipped folder, inside the installed package or beside the source root.

    Raises:
        RuntimeError: the installation holds neither (a broken package, not a user's mistake).
    """
    packaged = Path(str(resources.files("keelbook"))) / kind
    if packaged.is_dir():
        return packaged
    checkout = Path(__file__).resolve().parents[2]
    if (checkout / "pyproject.toml").is_file() and (checkout / kind).is_dir():
        return checkout / kind
    raise RuntimeError(f"the installation of keelbook has no '{kind}' folder")

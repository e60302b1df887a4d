"""Findings of the readers: all of them stop the run, and all name the place and the declaration."""

from dataclasses import dataclass
from typing import Any


@dataclass(frozen=True)
class Place:
    """The file (and sheet) being read, and where it is declared."""

    source: str
    file: str
    declared: str
    sheet: str = ""

    def finding(self, rule: str, message: str, **fields: Any) -> dict[str, Any]:
        """Return one `stop` finding of ESS level 0 (can the file be read as declared?) at this place."""
        return {
            "rule": rule,
            "severity": "stop",
            "level": 0,
            "message": f"source '{self.source}': {message}",
            "file": self.file,
            "sheet": self.sheet,
            **fields,
        }

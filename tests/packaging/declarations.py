"""Prints what the declarations of an installed Keelbook give, as a hash, and where it is installed.

Run in every way of installing: `python declarations.py`. The same declarations give the same hash.
"""

import dataclasses
import hashlib
import json
import sys
from collections.abc import Iterable, Mapping
from collections.abc import Set as AbstractSet
from typing import Any

import keelbook
from keelbook.contracts.assets import REFERENCE_TABLES, load_asset_rules, load_reference_rates
from keelbook.contracts.codes import load_code_lists
from keelbook.contracts.measures import load_measures
from keelbook.contracts.parameters import load_parameters
from keelbook.contracts.retirement import load_retirement
from keelbook.contracts.screening_rules import load_screening_rules
from keelbook.contracts.tables import load_tables
from keelbook.locate import folder


def plain(value: Any) -> Any:
    """Return nested declarations as lists, dicts and atoms; anything else is refused, so that nothing is lost."""
    if value is None or isinstance(value, (str, int, float, bool)):
        return value
    if isinstance(value, Mapping):
        return {str(key): plain(item) for key, item in value.items()}
    if isinstance(value, AbstractSet):
        return sorted(map(plain, value), key=repr)
    if isinstance(value, (list, tuple)):
        return [plain(item) for item in value]
    if dataclasses.is_dataclass(value):
        return {f.name: plain(getattr(value, f.name)) for f in dataclasses.fields(value)}
    if hasattr(type(value), "model_fields"):
        return {name: plain(getattr(value, name)) for name in type(value).model_fields}
    if isinstance(value, Iterable):
        return [plain(item) for item in value]
    raise TypeError(f"cannot print a {type(value).__name__}")


def declarations() -> dict[str, Any]:
    """Return everything that is declared, by loader, and the names of the files it comes from."""
    return {
        "tables": plain(load_tables()),
        "measures": plain(load_measures()),
        "codes": plain(load_code_lists()),
        "parameters": plain(load_parameters().all()),
        "assets": plain(load_asset_rules().all()),
        "retirement": plain(load_retirement()),
        "reference": {name: plain(load_reference_rates(name)) for name in REFERENCE_TABLES},
        "screening": plain(load_screening_rules()),
        "files": [
            f"{kind}/{path.relative_to(folder(kind)).as_posix()}"
            for kind in ("rules", "schemas")
            for path in sorted(folder(kind).rglob("*"))
            if path.is_file()
        ],
    }


def main() -> None:
    """Print the hash and the size of what is declared on standard output, and the place on standard error."""
    text = json.dumps(declarations(), sort_keys=True, ensure_ascii=False)
    print(hashlib.sha256(text.encode()).hexdigest(), len(text))
    print(keelbook.__file__, folder("rules"), folder("schemas"), file=sys.stderr)


if __name__ == "__main__":
    main()

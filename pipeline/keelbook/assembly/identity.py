"""What a build is made from, as hashes: same sources, rules and code give the same build id."""

import hashlib
from concurrent.futures import ThreadPoolExecutor
from dataclasses import dataclass
from pathlib import Path

from keelbook.assembly.declaration import Assembly
from keelbook.contracts.judgements import ACCEPTANCES, CORRECTIONS
from keelbook.locate import folder


@dataclass(frozen=True)
class Identity:
    """Hashes of everything a build depends on; times, hosts and users are not part of it."""

    build_id: str
    sources: str
    rules: str
    code: str


def identify(assembly: Assembly, paths: dict[str, Path]) -> Identity:
    """Return the identity of the build that the assembly's files would give now."""
    sources = _hash([(name, paths[name]) for name in sorted(paths)])
    declared = [
        ("assembly.toml", assembly.folder / "assembly.toml"),
        *((name, path) for name in (CORRECTIONS, ACCEPTANCES) if (path := assembly.folder / name).is_file()),
        *_files(assembly.folder / "rules", "own"),
    ]
    rules = _hash([*declared, *_files(folder("rules"), "rules"), *_files(folder("schemas"), "schemas")])
    package = Path(__file__).resolve().parents[1]
    code = _hash([(str(path.relative_to(package)), path) for path in sorted(package.rglob("*.py"))])
    build_id = hashlib.sha256(f"{sources}\n{rules}\n{code}\n".encode()).hexdigest()[:16]
    return Identity(build_id, sources, rules, code)


def _files(root: Path, label: str) -> list[tuple[str, Path]]:
    if not root.is_dir():
        return []
    return [(f"{label}/{path.relative_to(root)}", path) for path in sorted(root.rglob("*")) if path.is_file()]


def _hash(files: list[tuple[str, Path]]) -> str:
    with ThreadPoolExecutor() as pool:
        digests = list(pool.map(_digest, [path for _, path in files]))
    lines = [f"{digest}  {name}\n" for digest, (name, _) in zip(digests, files, strict=True)]
    return hashlib.sha256("".join(lines).encode()).hexdigest()


def _digest(path: Path) -> str:
    with path.open("rb") as file:
        return hashlib.file_digest(file, "sha256").hexdigest()

"""The build folder: generations beside each other, one writer at a time, published whole or not at all.

`build/<id>/` is one generation. `build/current` is a link to the generation in use, and `build/panel.duckdb`
and `build/evidence.duckdb` go through it, so that one rename switches both.
"""

import hashlib
import os
import shutil
from collections.abc import Iterator
from contextlib import contextmanager
from pathlib import Path

from filelock import FileLock, Timeout

from keelbook.errors import LockHeld, Problem

PANEL, EVIDENCE, MANIFEST, LOG = "panel.duckdb", "evidence.duckdb", "manifest.sha256", "log.jsonl"
REFUSED = "refused"
"""Folder of the last run that was not published: its evidence and findings."""


@contextmanager
def writing(out: Path) -> Iterator[Path]:
    """Hold the lock of a build folder and yield an empty work folder, removed afterwards unless published."""
    out.mkdir(parents=True, exist_ok=True)
    lock = FileLock(out / ".lock")
    try:
        lock.acquire(timeout=0)
    except Timeout:
        raise LockHeld(
            Problem(
                "another run is writing here",
                str(out),
                found="a lock held by a running process",
                expected="one writer at a time",
                remedy="wait for that run to end and start again",
            )
        ) from None
    try:
        for stray in out.glob(".work-*"):
            shutil.rmtree(stray)
        work = out / f".work-{os.getpid()}"
        work.mkdir()
        try:
            yield work
        finally:
            if work.exists():
                shutil.rmtree(work)
    finally:
        lock.release()


def current(out: Path) -> Path | None:
    """Return the folder of the generation in use, None if nothing was published yet."""
    link = out / "current"
    return out / os.readlink(link) if link.is_symlink() and link.exists() else None


def publish(work: Path, out: Path, build_id: str) -> Path:
    """Make a finished work folder a generation, and switch to it in one step.

    Every file is on disk before the switch; readers of the previous generation keep it.
    """
    for name in (PANEL, EVIDENCE):
        if (work / f"{name}.wal").exists():
            raise RuntimeError(f"{name} was not closed cleanly")
    (work / EVIDENCE).chmod(0o600)
    write_manifest(work)
    for path in work.iterdir():
        _sync(path)
    _sync(work)
    target = out / build_id
    if target.exists():
        shutil.rmtree(target)
    os.replace(work, target)
    _link(out / "current", build_id)
    for name in (PANEL, EVIDENCE):
        if not (out / name).is_symlink():
            _link(out / name, f"current/{name}")
    _sync(out)
    return target


def refuse(work: Path, out: Path) -> Path:
    """Keep what a stopped run found beside the published generation, which stays untouched."""
    target = out / REFUSED
    if target.exists():
        shutil.rmtree(target)
    for path in work.iterdir():
        path.chmod(0o600)
    os.replace(work, target)
    return target


def write_manifest(folder: Path) -> None:
    """Write the SHA-256 of every file of a folder, in the form `sha256sum -c` reads."""
    lines = []
    for path in sorted(folder.iterdir()):
        if path.name != MANIFEST:
            with path.open("rb") as file:
                lines.append(f"{hashlib.file_digest(file, 'sha256').hexdigest()}  {path.name}\n")
    (folder / MANIFEST).write_text("".join(lines), encoding="utf-8")


def changed_files(folder: Path) -> list[str]:
    """Return the files of a generation that are missing or differ from its manifest."""
    out = []
    for line in (folder / MANIFEST).read_text(encoding="utf-8").splitlines():
        digest, name = line.split("  ", 1)
        path = folder / name
        if not path.is_file():
            out.append(name)
            continue
        with path.open("rb") as file:
            if hashlib.file_digest(file, "sha256").hexdigest() != digest:
                out.append(name)
    return out


def _link(path: Path, target: str) -> None:
    temporary = path.with_name(f".{path.name}.{os.getpid()}")
    temporary.unlink(missing_ok=True)
    temporary.symlink_to(target)
    os.replace(temporary, path)


def _sync(path: Path) -> None:
    descriptor = os.open(path, os.O_RDONLY)
    try:
        os.fsync(descriptor)
    finally:
        os.close(descriptor)

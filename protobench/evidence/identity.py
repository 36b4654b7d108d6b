"""Which data and which sources a report rests on, as digests that another installation can compare."""

from __future__ import annotations

import hashlib
from pathlib import Path

from protobench.contract.load import spec_root

_PACKAGE = Path(__file__).resolve().parent.parent
SOURCES = ("*.py", "*.j2", "*.css")


def digest_of(root: Path, *patterns: str) -> str:
    """SHA-256, in hex, over path and content of each file below ``root`` that fits a pattern, in order of path."""
    files = {path for pattern in patterns for path in root.rglob(pattern) if path.is_file()}
    total = hashlib.sha256()
    for path in sorted(files, key=lambda path: path.relative_to(root).as_posix()):
        content = path.read_bytes()
        total.update(f"{path.relative_to(root).as_posix()}\0{len(content)}\0".encode())
        total.update(content)
    return total.hexdigest()


def contract_digest(version: str) -> str:
    """Digest of the contract's tables, those of ``spec/`` that the bench read."""
    return digest_of(spec_root() / version, "*.toml")


def bench_digest() -> str:
    """Digest of the bench's own sources."""
    return digest_of(_PACKAGE, *SOURCES)


def file_digest(path: Path) -> str:
    """SHA-256 of one file, in hex; empty where it cannot be read."""
    try:
        return hashlib.sha256(path.read_bytes()).hexdigest()
    except OSError:
        return ""

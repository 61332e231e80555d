"""Checksums of files, and an output folder that is whole or not there at all."""

from __future__ import annotations

import hashlib
from pathlib import Path


def sha256_of(path: Path) -> str:
    """Return the SHA-256 of a file, in hexadecimal; raises OSError where it cannot be read."""
    with path.open("rb") as stream:
        return hashlib.file_digest(stream, "sha256").hexdigest()

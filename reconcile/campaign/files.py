"""Checksums of files, and an output folder that is whole or not there at all."""

from __future__ import annotations

import hashlib
import os
import re
import shutil
import tempfile
from dataclasses import dataclass
from pathlib import Path
from types import TracebackType
from typing import Literal

from reconcile.campaign.refusal import Place, Refusal

CHECKSUMS = "checksums.sha256"
INPUT_CHECKSUMS = "inputs.sha256"
# What file managers drop into folders that a person looks at; nobody's work.
_LITTER = frozenset({".DS_Store", "Thumbs.db", "desktop.ini"})
_LINE = re.compile(r"(\\?)([0-9a-fA-F]{64}) [ *](.+)")


@dataclass(frozen=True, slots=True)
class Changed:
    """A file of a close-out that is not as it was written."""

    path: str  # relative to the folder, forward slashes
    how: Literal["changed", "missing", "extra"]

    def __str__(self) -> str:
        """Return it as a person reads it."""
        return f"{self.path}: {self.how}"


def sha256_of(path: Path) -> str:
    """Return the SHA-256 of a file, in hexadecimal; raises OSError where it cannot be read."""
    with path.open("rb") as stream:
        return hashlib.file_digest(stream, "sha256").hexdigest()


def checksum_lines(entries: dict[str, str]) -> str:
    """Return checksums as ``sha256sum -c`` reads them, sorted by path.

    Parameters
    ----------
    entries : SHA-256 by path, forward slashes
    """
    lines = []
    for path in sorted(entries):
        escaped = path.replace("\\", "\\\\").replace("\n", "\\n")  # as sha256sum writes such names
        mark = "\\" if escaped != path else ""
        lines.append(f"{mark}{entries[path]}  {escaped}\n")
    return "".join(lines)


def write_checksums(folder: Path) -> Path:
    """Write checksums.sha256 of every file in a folder and return its path; raises OSError."""
    target = folder / CHECKSUMS
    entries = {name: sha256_of(folder / name) for name in _names(folder) if name != CHECKSUMS}
    with target.open("w", encoding="utf-8", newline="\n") as stream:
        stream.write(checksum_lines(entries))
    return target


def verify(folder: Path) -> list[Changed]:
    """Return the files of a close-out that changed, are missing or were added, sorted by path.

    Raises
    ------
    Refusal
        The folder holds no checksums.sha256, or one that is none.
    """
    folder = Path(folder)
    written = _written(folder)
    found = {name for name in _names(folder) if name != CHECKSUMS}
    changed = [Changed(name, "missing") for name in written.keys() - found]
    changed += [Changed(name, "extra") for name in found - written.keys()]
    changed += [
        Changed(name, "changed") for name in found & written.keys() if sha256_of(folder / name) != written[name].lower()
    ]
    return sorted(changed, key=lambda one: one.path)


def changed_inputs(folder: Path, campaign_folder: Path) -> list[Changed]:
    """Return the input files of a close-out that changed or are missing since it read them, sorted by path.

    Raises
    ------
    Refusal
        The folder holds no inputs.sha256, or one that is none.
    """
    changed = []
    for name, written in _written(Path(folder), INPUT_CHECKSUMS).items():
        path = Path(campaign_folder) / name
        if not path.is_file():
            changed.append(Changed(name, "missing"))
        elif sha256_of(path) != written.lower():
            changed.append(Changed(name, "changed"))
    return sorted(changed, key=lambda one: one.path)


def _names(folder: Path) -> list[str]:
    """Return every file below a folder, relative to it; a link counts as a file."""
    names = []
    for root, folders, files in os.walk(folder):
        links = [name for name in folders if (Path(root) / name).is_symlink()]
        names += [
            (Path(root) / name).relative_to(folder).as_posix() for name in [*files, *links] if name not in _LITTER
        ]
    return sorted(names)


def _written(folder: Path, listed: str = CHECKSUMS) -> dict[str, str]:
    path = folder / listed
    try:
        lines = path.read_text(encoding="utf-8").removesuffix("\n").split("\n")
    except (OSError, UnicodeDecodeError):
        raise Refusal(
            folder.as_posix(),
            found=f"no readable {listed}",
            expected="the folder that a close-out wrote",
            remedy="Give that folder.",
        ) from None
    written = {}
    for number, line in enumerate(lines, start=1):
        if not line:
            continue
        match = _LINE.fullmatch(line)
        if match is None:
            raise Refusal(
                Place(path.as_posix(), line=number),
                found=f"'{line[:80]}'",
                expected="a checksum and a file's name",
                remedy="Make the close-out again: its list of checksums was changed.",
            )
        name = match.group(3)
        if match.group(1):
            name = re.sub(r"\\(.)", lambda sign: "\n" if sign.group(1) == "n" else sign.group(1), name)
        written[name] = match.group(2)
    return written


def check_output(path: Path, campaign_folder: Path | None = None) -> None:
    """Refuse an output folder in which something could be harmed; to be asked before any work.

    Parameters
    ----------
    path : where a close-out is to be written
    campaign_folder : None: not checked against

    Raises
    ------
    Refusal
        The folder lies in the campaign folder or holds it, is a file, or holds a file that a close-out did not write
        or one that was changed since.
    """
    path = Path(path)
    if campaign_folder is not None:
        keep_apart(path, campaign_folder)
    if path.exists() and not path.is_dir():
        raise Refusal(
            path.as_posix(), found="a file", expected="a folder, or a name that is free", remedy="Choose another --out."
        )
    if not path.is_dir() or not _names(path):
        return
    if not (path / CHECKSUMS).is_file():
        raise Refusal(
            path.as_posix(),
            found=f"files that no close-out wrote, such as '{_names(path)[0]}'",
            expected="an empty folder, an earlier close-out, or a name that is free",
            remedy="Choose another --out, or move the files away.",
        )
    changed = verify(path)
    if changed:
        others = f" and {len(changed) - 1} more" if len(changed) > 1 else ""
        raise Refusal(
            path.as_posix(),
            found=f"an earlier close-out in which '{changed[0].path}' is {_IS[changed[0].how]}{others}",
            expected="one that nobody changed since",
            remedy="Choose another --out, or move that folder away.",
        )


_IS = {"changed": "changed since", "missing": "missing", "extra": "added since"}


def keep_apart(path: Path, campaign_folder: Path) -> None:
    """Refuse an output folder that lies in the campaign folder or holds it."""
    out, campaign = path.resolve(), campaign_folder.resolve()
    if out.is_relative_to(campaign) or campaign.is_relative_to(out):
        inside = "inside" if out.is_relative_to(campaign) else "around"
        raise Refusal(
            path.as_posix(),
            found=f"an output folder {inside} the campaign folder {campaign_folder.as_posix()}",
            expected="one beside it: nothing is written into a campaign folder",
            remedy=f"Choose another --out, such as {(campaign.parent / 'reports' / campaign.name).as_posix()}.",
        )


class whole_folder:  # noqa: N801 - used like a function, in a with statement
    """Write an output folder whole or not at all.

    ``folder = whole_folder(path)``; ``with folder as staging: …`` gives a temporary folder beside `path` to write into.
    When the block ends well, the checksums are written, an earlier close-out steps aside and the new one takes its
    place; when it fails, nothing is left behind. Afterwards `final` is where the new one lies and `message` says so.

    Raises
    ------
    Refusal
        As `check_output`, on entering.
    OSError
        Nothing can be written there.
    """

    def __init__(self, path: Path) -> None:
        self.path = Path(path)
        self.final: Path | None = None  # None: not written
        self.message = ""
        self._staging: Path | None = None

    def __enter__(self) -> Path:
        """Make the temporary folder."""
        check_output(self.path)
        self.path.parent.mkdir(parents=True, exist_ok=True)
        self._staging = Path(tempfile.mkdtemp(prefix=f".{self.path.name}-", dir=self.path.parent))
        self._staging.chmod(0o755)  # mkdtemp makes it for its owner alone; a report is to be read
        return self._staging

    def __exit__(
        self, kind: type[BaseException] | None, error: BaseException | None, traceback: TracebackType | None
    ) -> None:
        """Put the new folder in place, or take it away."""
        staging = self._staging
        if staging is None:
            return
        if kind is not None:
            shutil.rmtree(staging, ignore_errors=True)
            return
        write_checksums(staging)
        self._place(staging)

    def _place(self, staging: Path) -> None:
        if not self.path.exists():
            staging.replace(self.path)
            self.final, self.message = self.path, f"written to {self.path.as_posix()}"
            return
        aside = self.path.with_name(f".{self.path.name}-old-{staging.name[-8:]}")
        try:
            check_output(self.path)  # somebody may have signed it meanwhile
            self.path.replace(aside)
        except (OSError, Refusal) as trouble:
            self._beside(staging, trouble)
            return
        try:
            staging.replace(self.path)
        except OSError as trouble:
            aside.replace(self.path)
            self._beside(staging, trouble)
            return
        shutil.rmtree(aside, ignore_errors=True)
        self.final = self.path
        left = f"; the earlier one could not be removed and lies in {aside.as_posix()}" if aside.exists() else ""
        self.message = f"written to {self.path.as_posix()}, in place of the earlier close-out{left}"

    def _beside(self, staging: Path, trouble: OSError | Refusal) -> None:
        """Keep the new folder under the next free name, since the earlier one cannot be replaced."""
        number = 2
        while (other := self.path.with_name(f"{self.path.name}-{number}")).exists():
            number += 1
        staging.rename(other)
        why = trouble.found if isinstance(trouble, Refusal) else f"a file in it is open elsewhere ({trouble.strerror})"
        self.final = other
        self.message = (
            f"the earlier close-out in {self.path.as_posix()} stays ({why}); this one is in {other.as_posix()}"
        )

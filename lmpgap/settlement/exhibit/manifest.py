"""The list of an exhibit's files with their hashes, and what does not agree with it."""

from __future__ import annotations

import hashlib
import json
import stat
from collections.abc import Mapping
from dataclasses import dataclass
from pathlib import Path, PurePosixPath
from typing import Any

from lmpgap.errors import DataError

MANIFEST = "manifest.json"
KIND = "lmpgap exhibit"
FORMAT = 1


@dataclass(frozen=True, kw_only=True)
class Finding:
    """One thing that does not agree.

    Attributes
    ----------
    place
        File, or file and row.
    message
        What is wrong, in words.
    """

    place: str
    message: str

    def __str__(self) -> str:
        return f"{self.place}: {self.message}"


def sha256(content: bytes) -> str:
    """Return the SHA-256 as hexadecimal."""
    return hashlib.sha256(content).hexdigest()


def manifest_text(files: Mapping[str, bytes]) -> bytes:
    """Return the manifest of files given by relative path."""
    content = {"kind": KIND, "format": FORMAT, "files": {name: sha256(files[name]) for name in sorted(files)}}
    return (json.dumps(content, indent=2, ensure_ascii=False) + "\n").encode("utf-8")


def is_exhibit(folder: Path) -> bool:
    """Return whether a folder is an exhibit."""
    try:
        return read_manifest(folder) is not None
    except DataError:
        return False


def read_manifest(folder: Path) -> dict[str, str]:
    """Return the hashes by file name.

    Raises
    ------
    DataError
        When there is no manifest, or it is not one of an exhibit.
    """
    file = folder / MANIFEST
    if file.is_symlink() or not file.is_file():
        raise DataError(f"{folder} is not an exhibit: it has no {MANIFEST}; `lmpgap settle` makes one")
    content = read_json(file.read_bytes(), MANIFEST)
    if content.get("kind") != KIND:
        raise DataError(f"{file} is not the manifest of an exhibit")
    if content.get("format") != FORMAT:
        raise DataError(
            f"{folder} was written in format {content.get('format')!r}, this version reads {FORMAT}: "
            "verify it with the version of lmpgap that its page names"
        )
    files = content.get("files")
    if not isinstance(files, dict) or not all(isinstance(v, str) for v in files.values()):
        raise DataError(f"{file} lists no files")
    return files


def read_json(content: bytes, name: str) -> dict[str, Any]:
    """Return a JSON object.

    Raises
    ------
    DataError
        When the content is none.
    """
    try:
        value = json.loads(content.decode("utf-8"))
    except (ValueError, RecursionError) as error:
        raise DataError(f"{name} is not JSON in UTF-8 ({error})") from error
    if not isinstance(value, dict):
        raise DataError(f"{name} does not hold an object")
    return value


def check_files(folder: Path, listed: Mapping[str, str]) -> tuple[dict[str, bytes], list[Finding]]:
    """Return the content of the listed files that can be trusted to be the folder's own, and what does not agree.

    A name that could lead out of the folder, and anything that is not a regular file, is told and not read.
    """
    content: dict[str, bytes] = {}
    findings = []
    for name, expected in listed.items():
        if not is_safe(name):
            findings.append(
                Finding(place=MANIFEST, message=f"lists {name!r}, a name outside the exhibit; it was not read")
            )
            continue
        path = folder / name
        if _through_link(folder, name):
            findings.append(Finding(place=name, message="is a link, not a file of the exhibit; it was not read"))
        elif not path.exists():
            findings.append(Finding(place=name, message="is missing"))
        elif not stat.S_ISREG(path.stat().st_mode):
            findings.append(Finding(place=name, message="is not a regular file"))
        else:
            content[name] = path.read_bytes()
            found = sha256(content[name])
            if found != expected:
                findings.append(
                    Finding(
                        place=name,
                        message=f"was changed: SHA-256 {found[:12]}…, the manifest has {expected[:12]}…",
                    )
                )
    for extra in foreign_files(folder, listed):
        findings.append(Finding(place=extra, message="is not part of the exhibit"))
    return content, findings


def foreign_files(folder: Path, listed: Mapping[str, str]) -> list[str]:
    """Return the files below a folder that its manifest does not list, links included, without following any."""
    found = []
    pending = [folder]
    while pending:
        for path in sorted(pending.pop().iterdir()):
            name = path.relative_to(folder).as_posix()
            if path.is_dir() and not path.is_symlink():
                pending.append(path)
            elif name != MANIFEST and name not in listed:
                found.append(name)
    return sorted(found)


def is_safe(name: str) -> bool:
    """Return whether a name stays inside the folder on every system."""
    path = PurePosixPath(name)
    return (
        bool(name)
        and not any(character in name for character in ("\\", ":", "\0"))
        and not path.is_absolute()
        and path.as_posix() == name
        and all(part not in ("..", ".") for part in path.parts)
        and name != MANIFEST
    )


def _through_link(folder: Path, name: str) -> bool:
    path = folder
    for part in PurePosixPath(name).parts:
        path = path / part
        if path.is_symlink():
            return True
    return False

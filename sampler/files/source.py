"""Input files as bytes and TOML, with the faults that come before any content."""

from __future__ import annotations

import hashlib
import os
import tomllib
from pathlib import Path
from typing import Any

from sampler.files.faults import Faults

UTF16_MARKS = (b"\xff\xfe", b"\xfe\xff")


def shown_path(path: str | Path) -> str:
    """A path as it stands in messages and results: as given, without detours, with forward slashes."""
    return Path(os.path.normpath(path)).as_posix()


def beside(path: str | Path, named: str) -> Path:
    """The file that `path` names relative to itself."""
    return Path(path).parent / named


def sha256(*parts: bytes) -> str:
    """SHA-256 of the parts one after the other, in hexadecimal."""
    digest = hashlib.sha256()
    for part in parts:
        digest.update(part)
    return digest.hexdigest()


def read_bytes(path: str | Path, what: str, faults: Faults, *, binary: bool = False) -> bytes | None:
    """The bytes of a file; None with a fault when it is missing, a folder, unreadable, empty or, unless allowed, binary.

    `what` says which kind of file is wanted, such as "a study file (TOML)".
    """
    try:
        data = Path(path).read_bytes()
    except FileNotFoundError:
        faults.add(f"there is no such file; give the path of {what}")
    except IsADirectoryError:
        faults.add(f"this is a folder; give the path of {what} in it")
    except (OSError, ValueError) as error:
        if Path(path).is_dir():  # what Windows says of a folder is "permission denied"
            faults.add(f"this is a folder; give the path of {what} in it")
        else:
            faults.add(f"cannot be read ({getattr(error, 'strerror', None) or error}); give {what} that may be read")
    else:
        if not data.strip(b"\xef\xbb\xbf \t\r\n"):
            faults.add(f"the file is empty; give {what}")
        elif not binary and b"\0" in data[:65536] and not data.startswith(UTF16_MARKS):
            faults.add(f"this is a binary file; give {what}")
        else:
            return data
    return None


def read_toml(path: str | Path, what: str, faults: Faults) -> tuple[dict[str, Any], bytes] | None:
    """The content of a TOML file and its bytes."""
    data = read_bytes(path, what, faults)
    if data is None:
        return None
    try:
        return tomllib.loads(data.decode("utf-8-sig").replace("\r\n", "\n")), data
    except UnicodeDecodeError as error:
        line = data[:error.start].count(b"\n") + 1
        faults.add(f"this is not UTF-8 text (line {line}); save it as UTF-8")
    except (tomllib.TOMLDecodeError, RecursionError) as error:
        faults.add(f"this is not TOML: {error}; give {what}, and mend that line")
    return None

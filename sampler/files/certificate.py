"""certificate.json: a certificate as JSON, its arrays as base64 of little-endian numbers, compressed when large."""

from __future__ import annotations

import base64
import gzip
import json
import zlib
from pathlib import Path
from typing import Any

import numpy as np

from sampler.errors import CertificateError
from sampler.files.faults import Faults
from sampler.files.source import read_bytes, shown_path
from sampler.tasks.certify import Certified

COMPRESSED_ABOVE = 200_000
GZIP = b"\x1f\x8b"
KINDS = {"f": "<f8", "i": "<i8", "u": "<i8"}


def encode_certificate(certificate: dict[str, Any]) -> bytes:
    """UTF-8 JSON, or the gzip of it when it is longer than COMPRESSED_ABOVE bytes; the same value gives the same bytes."""
    def plain(value: Any) -> Any:
        if isinstance(value, np.ndarray):
            kind = KINDS[value.dtype.kind]
            return {"dtype": kind, "shape": list(value.shape),
                    "base64": base64.b64encode(np.ascontiguousarray(value, kind).tobytes()).decode()}
        if isinstance(value, dict):
            return {name: plain(item) for name, item in value.items()}
        if isinstance(value, list | tuple):
            return [plain(item) for item in value]
        return value.item() if isinstance(value, np.generic) else value

    text = (json.dumps(plain(certificate), indent=1, ensure_ascii=False, allow_nan=False) + "\n").encode()
    return text if len(text) <= COMPRESSED_ABOVE else gzip.compress(text, mtime=0)


def decode_certificate(data: bytes, where: str = "certificate.json") -> dict[str, Any]:
    """The certificate of such bytes. Raises CertificateError when they are damaged."""
    def whole(value: Any) -> Any:
        if isinstance(value, dict):
            if set(value) == {"dtype", "shape", "base64"}:
                if value["dtype"] not in KINDS.values():
                    raise ValueError(f"dtype {value['dtype']!r}")
                raw = base64.b64decode(value["base64"], validate=True)
                return np.frombuffer(raw, value["dtype"]).reshape([int(size) for size in value["shape"]]).copy()
            return {name: whole(item) for name, item in value.items()}
        return [whole(item) for item in value] if isinstance(value, list) else value

    try:
        text = gzip.decompress(data) if data.startswith(GZIP) else data
        found = whole(json.loads(text.decode()))
    except (ValueError, TypeError, OSError, EOFError, zlib.error, RecursionError) as error:
        raise CertificateError(f"{where}: damaged, {error}; plan again") from error
    if not isinstance(found, dict):
        raise CertificateError(f"{where}: not a certificate; plan again")
    return found


def read_certificate(folder: str | Path) -> dict[str, Any]:
    """The certificate beside a plan. Raises InputError when there is none, CertificateError when it is damaged."""
    path = Path(folder) / "certificate.json"
    faults = Faults(shown_path(path))
    data = read_bytes(path, "the certificate.json of a result", faults, binary=True)
    faults.close()
    assert data is not None
    return decode_certificate(data, shown_path(path))


def certified_json(result: Certified) -> str:
    """What was proven, as JSON."""
    return json.dumps({"proven": result.sentence, "n_sites": result.n_sites, "lower_bound": result.lower_bound,
                       "fewest_proven": result.fewest_proven}, ensure_ascii=False)

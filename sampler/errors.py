"""The exception types. Every message says where, what was found, what is allowed and what to do."""

from __future__ import annotations

from collections.abc import Iterable


class SamplerError(Exception):
    """Whatever this program raises on purpose."""


class InputError(SamplerError):
    """Bad input; `faults` lists every fault found, one complete sentence each."""

    def __init__(self, faults: str | Iterable[str]):
        self.faults: tuple[str, ...] = (faults,) if isinstance(faults, str) else tuple(faults)
        super().__init__("\n".join(self.faults))


class MissingExtraError(SamplerError):
    """An optional package is needed for this input and is not installed."""


class CertificateError(SamplerError):
    """A certificate, plan, study or layout does not prove what it claims; the message names the place."""

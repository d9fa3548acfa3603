"""The witness's verdict as text."""

from __future__ import annotations

from sampler.report.characterise import HEIGHT, sentence


def verify_text(summary: str, findings: list[str], notes: tuple[str, ...]) -> str:
    """The verdict first, then what was found."""
    lines = sentence(summary)
    for said in (*findings, *(f"Note: {note}" for note in notes[:2])):
        lines += sentence(said, first="  ")[:3]
    return "\n".join(lines[:HEIGHT])

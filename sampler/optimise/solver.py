"""HiGHS, silent and on one thread."""

from __future__ import annotations

import highspy


class _Silent(highspy.Highs):
    """Silent before the library prints its banner, which it does while a solver is made."""

    def enableCallbacks(self) -> None:  # noqa: N802 (the library's name)
        super().setOptionValue("output_flag", False)
        super().enableCallbacks()


def quiet_highs() -> highspy.Highs:
    """A new solver without output, on one thread."""
    solver = _Silent()
    solver.setOptionValue("threads", 1)
    return solver

"""One count of progress for many steps of unequal length."""

from __future__ import annotations

from collections.abc import Callable

Progress = Callable[[int, int], None]

_TOTAL = 1000


class StepProgress:
    """Turn the progress of each step into one count from 0 to 1000.

    Parameters
    ----------
    report : callable or None
        Called with (done, total).
    shares : dict of str to float
        About how long each step takes compared with the others, in the order in which they come.
    """

    def __init__(self, report: Progress | None, *, shares: dict[str, float]) -> None:
        self._report = report
        self._done = 0  # a step that is done twice must not take the count back
        whole = sum(shares.values())
        self._begin: dict[str, float] = {}
        self._share = {name: share / whole for name, share in shares.items()}
        passed = 0.0
        for name, share in self._share.items():
            self._begin[name] = passed
            passed += share

    def step(self, name: str) -> Progress:
        """Return what a step calls with its own (done, total)."""
        begin, share = self._begin[name], self._share[name]

        def advance(done: int, total: int) -> None:
            if self._report is not None:
                part = done / total if total else 1.0
                self._done = max(self._done, round(_TOTAL * (begin + share * min(part, 1.0))))
                self._report(self._done, _TOTAL)

        advance(0, 1)
        return advance

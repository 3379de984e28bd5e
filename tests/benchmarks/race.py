"""Runs contenders in turns, so that whatever else the machine does meets all of them, and tables their ratios."""

from __future__ import annotations

import resource
import sys
import time
from dataclasses import dataclass

import numpy as np

ROUNDS = 5
OURS = "this program"


@dataclass(frozen=True)
class Contender:
    """A way to do the work, or a part of it.

    Attributes
    ----------
    name : str
    act : callable
    share : float
        Part of the work that `act` does; slow ways do a part, and their times are scaled up.
    limit : bool
        Whether it is no way to do the work, but less than any way needs.
    """

    name: str
    act: object
    share: float = 1.0
    limit: bool = False


def used_s():
    """Time at work so far, of this process and of those it waited for, and the clock, s."""
    children = resource.getrusage(resource.RUSAGE_CHILDREN)
    return np.array([time.process_time() + children.ru_utime + children.ru_stime, time.perf_counter()])


def race(title, ours, others, *, rounds=ROUNDS, repeats=1):
    """Let all contenders run in turns; print the table; return for each other its ratio to ours in time at work.

    Ratios are taken within each round and their median is told, so that a machine that is busy for a while does not
    favour anyone.
    """
    contenders = [Contender(OURS, ours), *others]
    for contender in contenders:
        contender.act()
    taken = np.empty((rounds, len(contenders), 2))
    for round_ in range(rounds):
        for column, contender in enumerate(contenders):
            begun = used_s()
            for _ in range(repeats):
                contender.act()
            taken[round_, column] = (used_s() - begun) / repeats / contender.share
    ratios = np.median(taken / taken[:, :1], axis=0)
    lines = ["", title, f"{'':52}{'work ms':>10}{'clock ms':>10}{'work ÷ ours':>14}{'clock ÷ ours':>14}"]
    for contender, times, ratio in zip(contenders, 1e3 * np.median(taken, axis=0), ratios, strict=True):
        name = contender.name + (" (physical limit)" if contender.limit else "")
        name += f" (scaled from {contender.share:.2g})" if contender.share < 1 else ""
        lines.append(f"{name:52}{times[0]:10.2f}{times[1]:10.2f}{ratio[0]:14.2f}{ratio[1]:14.2f}")
    sys.stdout.write("\n".join(lines) + "\n")
    return {contender.name: float(ratio[0]) for contender, ratio in zip(contenders, ratios, strict=True)}

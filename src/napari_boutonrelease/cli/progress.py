"""A progress bar on long work: on a terminal only, and on stderr."""

import sys
from contextlib import contextmanager

TYPE_CHECKING = False
if TYPE_CHECKING:
    from collections.abc import Callable, Iterator


@contextmanager
def progress_bar(label: str) -> "Iterator[Callable[[int, int], None] | None]":
    """Give a callback for (done, total), or None where stderr is not a terminal."""
    if not sys.stderr.isatty():
        yield None
        return
    from tqdm import tqdm

    with tqdm(desc=label, leave=False, file=sys.stderr, bar_format="{desc}: {percentage:3.0f}% {bar} {elapsed}") as bar:

        def update(done: int, total: int) -> None:
            bar.total = total
            bar.update(done - bar.n)

        yield update

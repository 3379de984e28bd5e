"""A progress bar on long work: on a terminal only, and on stderr."""

import sys
from contextlib import contextmanager

TYPE_CHECKING = False
if TYPE_CHECKING:
    from collections.abc import Callable, Iterator


@contextmanager
def progress_bar(label: str, *, counted: bool = False) -> "Iterator[Callable[[int, int], None] | None]":
    """Give a callback for (done, total), or None where stderr is not a terminal; `counted` shows both numbers."""
    if not sys.stderr.isatty():
        yield None
        return
    from tqdm import tqdm

    done = "{n_fmt}/{total_fmt}" if counted else "{percentage:3.0f}%"
    with tqdm(desc=label, leave=False, file=sys.stderr, bar_format=f"{{desc}}: {done} {{bar}} {{elapsed}}") as bar:

        def update(done: int, total: int) -> None:
            bar.total = total
            bar.update(done - bar.n)
            if counted:
                bar.refresh()  # recordings are far between

        yield update

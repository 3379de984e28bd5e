"""From two or more analysed recordings to the tables of a comparison."""

from __future__ import annotations

from datetime import UTC, datetime
from pathlib import Path
from typing import TYPE_CHECKING, Any

import numpy as np

from ..analysis.savefile import package_versions
from ..errors import InputError
from ..recording import file_digest
from .joint_step import fit_boutons
from .matching import match_boutons, matches_from_ids
from .population import cautions_of, summarise
from .pulse_intervals import interval_tables
from .results import Comparison
from .tables import changes_table, conditions_table, joint_table, unmatched_table, variance_mean_table

if TYPE_CHECKING:
    from collections.abc import Sequence

    from numpy.typing import NDArray

    from ..analysis.progress import Progress
    from .recording import ComparedRecording
    from .settings import CompareSettings

FORMAT_VERSION = 1


def compare_recordings(
    recordings: Sequence[ComparedRecording],
    *,
    settings: CompareSettings,
    pairs: NDArray[np.int64] | None = None,
    progress: Progress | None = None,
) -> Comparison:
    """Compare the same boutons in two or more recordings.

    Parameters
    ----------
    recordings : sequence of ComparedRecording
        Two or more, in the order in which they were made; ids of boutons are those of the first.
    settings : CompareSettings
        Every choice.
    pairs : (n, n_recordings) ndarray of int, optional
        A row a bouton: its id in each recording, 0 where it is not there. Found by the mean images, where left out.
    progress : callable, optional
        Called with (done, total) boutons.

    Returns
    -------
    Comparison

    Raises
    ------
    InputError
        If there are fewer than two, two have the same name, the images do not match, or no bouton does.
    """
    names = [recording.name for recording in recordings]
    if len(names) < 2:
        raise InputError(f"A comparison needs two or more analyses (given {len(names)}).")
    if len(set(names)) < len(names):
        twice = next(name for name in names if names.count(name) > 1)
        raise InputError(f"Two recordings are called {twice}: give each a name of its own.")
    matches = (
        match_boutons(recordings, match_um=settings.match_um) if pairs is None else matches_from_ids(recordings, pairs)
    )
    if not (matches.row[:, 1:] >= 0).any():
        raise InputError(
            f"No bouton of {names[0]} was found in {' or '.join(names[1:])}: give the pairs of boutons in a table, or "
            "allow a larger distance."
        )
    rng = np.random.default_rng(settings.seed)
    fits = fit_boutons(recordings, matches, settings=settings, rng=rng, progress=progress)
    joint, changes = joint_table(recordings[0], fits), changes_table(recordings, matches, fits)
    intervals, recovery = interval_tables(recordings, matches, settings=settings, rng=rng)
    summary = summarise(recordings, matches, joint=joint, changes=changes, rng=rng)
    return Comparison(
        name=" - ".join(names),
        recordings=tuple(recordings),
        matches=matches,
        fits=fits,
        joint=joint,
        conditions=conditions_table(recordings, matches, fits),
        changes=changes,
        variance_mean=variance_mean_table(recordings[0], fits),
        intervals=intervals,
        recovery=recovery,
        unmatched=unmatched_table(recordings, matches),
        summary=summary,
        provenance=_provenance(recordings, settings, pairs),
        cautions=cautions_of(summary, joint=joint),
        settings=settings,
    )


def _provenance(
    recordings: Sequence[ComparedRecording], settings: CompareSettings, pairs: NDArray[np.int64] | None
) -> dict[str, Any]:
    return {
        "format": "boutonrelease comparison",
        "format_version": FORMAT_VERSION,
        "created": datetime.now(UTC).isoformat(timespec="seconds"),
        "versions": package_versions(),
        "recordings": [
            {"name": recording.name, "source": recording.source, "sha256": _digest(Path(recording.source))}
            for recording in recordings
        ],
        "settings": settings.model_dump(mode="json"),
        "pairs": None if pairs is None else pairs.tolist(),
    }


def _digest(folder: Path) -> str | None:
    saved = folder / "analysis.json"
    return file_digest(saved) if saved.is_file() else None

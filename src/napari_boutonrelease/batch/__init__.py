"""Many recordings at once: a manifest in, a folder for each and one table of all boutons out."""

from __future__ import annotations

from .manifest import Manifest, ManifestRow, read_manifest
from .run import BatchInterrupted, BatchOutcome, run_batch

__all__ = ["BatchInterrupted", "BatchOutcome", "Manifest", "ManifestRow", "read_manifest", "run_batch"]

"""A whole batch as one document: counts, failures, and what many scans show together."""

from __future__ import annotations

from dataclasses import dataclass

from moire.model import Verdict
from moire.trend import Trend, trend_note
from moire.volume import Volume, volume_note


@dataclass(frozen=True, slots=True, kw_only=True)
class Failure:
    """A file that could not be examined, and why."""

    path: str
    error: str


@dataclass(frozen=True, slots=True, kw_only=True)
class Batch:
    """What became of a folder.

    ``verdicts`` counts files, worst verdict first, all five of them; ``volumes`` are leaves
    measured together, ``trends`` bandings that grow over the whole ledger.
    """

    format: str = "moire.batch"
    version: int = 1
    software: str
    folder: str
    files: int
    verdicts: dict[Verdict, int]
    failed: tuple[Failure, ...]
    volumes: tuple[Volume, ...]
    trends: tuple[Trend, ...]

    def notes(self) -> list[str]:
        """What the batch shows as a whole, one sentence each, trends first."""
        return [*map(trend_note, self.trends), *map(volume_note, self.volumes)]

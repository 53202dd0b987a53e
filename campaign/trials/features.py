"""What the features of every kind of trial have in common."""

from __future__ import annotations

from typing import Protocol

from campaign.notices import Notice


class TrialFeatures(Protocol):
    """What is kept of one trial once its recording is no longer in memory: results and remarks, no series."""

    @property
    def notices(self) -> tuple[Notice, ...]:
        """What a reader should know about the trial."""

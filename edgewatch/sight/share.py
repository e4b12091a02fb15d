"""How large a share of a stream's candidates are bursts, learnt from the stream itself.

The net was taught on streams of all kinds; where sparks hardly burst, too many of its doubtful cases are none. Saerens,
Latinne & Decaestecker, "Adjusting the outputs of a classifier to new a priori probabilities", Neural Computation 14
(2002) 21-41: the mean of its probabilities, which are corrected by that very mean, leads to the share of greatest
likelihood. Here picture after picture (on-line expectation maximisation, Cappe & Moulines 2009) with a short memory,
so that another bar is followed at once.
"""

from __future__ import annotations

import math

MEMORY_S = 0.5
"""Candidates are forgotten with this time constant (s)."""

DOUBT = 200.0
"""The share starts as expected, as if so many candidates had been seen."""

MOST_SHIFT = 0.5
"""Log odds are lowered by no more than this, so that a bar of another steel shows in the first pictures; and never
raised: where sparks burst often that lets in more false bursts than true ones."""


class BurstShare:
    """Share of bursts among the candidates of a stream."""

    def __init__(self, *, period_s: float) -> None:
        """``period_s``: time between pictures (s)."""
        self._keep = math.exp(-period_s / MEMORY_S)
        self._found = self._expected = self._count = 0.0

    @property
    def shift(self) -> float:
        """What is added to the log odds that the net gives."""
        if not self._count:
            return 0.0
        usual = self._expected / self._count
        found = (self._found + DOUBT * usual) / (self._count + DOUBT)
        return min(0.0, max(-MOST_SHIFT, _log_odds(found) - _log_odds(usual)))

    def learn(self, found: float, expected: float, count: int) -> None:
        """From ``count`` candidates of a picture: the sums of their probabilities, shift included, and of those that
        were to be expected without a look.
        """
        self._found = self._keep * self._found + found
        self._expected = self._keep * self._expected + expected
        self._count = self._keep * self._count + count


def _log_odds(share: float) -> float:
    share = min(1.0 - 1e-6, max(1e-6, share))
    return math.log(share / (1.0 - share))

"""What magnitudes mean for a format: headroom in bits, shares with intervals, and the shift that would centre it."""

from __future__ import annotations

import math
from typing import NamedTuple

import numpy as np
import numpy.typing as npt

from narrowgauge.arithmetic.formats import Format
from narrowgauge.judge.intervals import binomial_lower, binomial_upper, jackknife

__all__ = ["Headroom", "Share", "centring_shift", "exponent", "headroom", "share_by_path"]

Doubles = npt.NDArray[np.float64]

_BATCHES = 32
_FEWEST = 20  # paths with an event, below which they are counted
_BEYOND = 2.0  # how much larger than the largest share of a path seen one may be that was not


class Headroom(NamedTuple):
    """Powers of two between the magnitudes seen and the ends of a format's normal range; negative past an end."""

    above: int
    below: int


class Share(NamedTuple):
    """A share with its interval."""

    estimate: float
    low: float
    high: float


def exponent(magnitude: float) -> int:
    """Return e of 2^e <= magnitude < 2^(e + 1), for a finite positive number."""
    return math.frexp(magnitude)[1] - 1


def headroom(form: Format, smallest: float, largest: float) -> Headroom:
    """Return the headroom of numbers between two finite positive magnitudes."""
    return Headroom(above=form.emax - exponent(largest), below=exponent(smallest) - form.emin)


def share_by_path(counts: Doubles, each: float, alpha: float) -> Share | None:
    """Return the share of events among `each` trials of a path, from the `counts` of independent paths, (paths,).

    Trials of one path hang together, so that paths are what is independent: the interval is that of a jackknife over 32
    batches of them. Where fewer than 20 paths have an event these paths are counted, with exact binomial bounds, and a
    path's share lies between the smallest seen and twice the largest; without any event it may be 1. None without
    trials.
    """
    if each <= 0 or counts.size < 2:
        return None
    shares = counts / each
    estimate, some = float(shares.mean()), shares > 0
    events = int(np.count_nonzero(some))
    if events < _FEWEST:
        smallest, largest = (float(shares[some].min()), float(shares[some].max())) if events else (0.0, 1.0)
        low = smallest * binomial_lower(events, counts.size, alpha / 2)
        high = min(1.0, _BEYOND * largest) * binomial_upper(events, counts.size, alpha / 2)
        return Share(estimate, low, min(1.0, high))
    parts = np.array_split(shares, min(_BATCHES, shares.size))
    sums, sizes = np.array([part.sum() for part in parts]), np.array([part.size for part in parts])
    without = (sums.sum() - sums) / (sizes.sum() - sizes)
    found = jackknife(np.concatenate([[estimate], without]), alpha)
    return Share(estimate, max(0.0, found.low), min(1.0, found.high))


def centring_shift(form: Format, smallest: float, largest: float) -> int:
    """Return by how many powers of two the exponents of a format would have to lie higher to be centred on magnitudes.

    The largest keeps a bit of headroom in any case, since what is too large costs more than what is too small.
    """
    bottom, top = exponent(smallest), exponent(largest)
    centre = math.floor((bottom + top - form.emin - form.emax) / 2)
    return max(centre, top + 1 - form.emax)

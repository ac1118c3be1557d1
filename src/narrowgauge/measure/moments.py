"""Mergeable moments to order four, batch by batch.

Merging follows the pairwise update formulas of "Formulas for robust, one-pass parallel computation of covariances and
arbitrary-order statistical moments", Sandia report SAND2008-6212, 2008 (recalled from memory); within a batch the sums
are taken about the batch's mean, so that no large mean cancels.
"""

from __future__ import annotations

import math
from dataclasses import dataclass

import numpy as np
import numpy.typing as npt

__all__ = ["BATCHES", "Moments", "Series"]

BATCHES = 32
_MOST_DISTINCT = 5  # a correction with at most so many values is counted, not averaged
# Finite values past 1e77 have fourth powers past float64: such a sum is infinite or NaN, and nothing is known of it.
_QUIET = np.errstate(all="ignore")

Doubles = npt.NDArray[np.float64]


class _Merged:
    """A place for the merged moments, which every figure asks for; no field, so neither compared nor stored."""

    __slots__ = ("_whole",)

    _whole: Moments


@dataclass(frozen=True, slots=True, kw_only=True)
class Moments(_Merged):
    """Count, mean and central sums of powers 2 to 4, each float64 of shape (batches,). Adds with `+`."""

    count: Doubles
    mean: Doubles
    m2: Doubles
    m3: Doubles
    m4: Doubles

    @classmethod
    @_QUIET
    def of(cls, values: Doubles, keep: npt.NDArray[np.bool_] | None = None, batches: int = BATCHES) -> Moments:
        """Return the moments of values (paths,) cut into equal batches in order; `keep` leaves paths out."""
        table = values.reshape(batches, -1)
        if keep is None:
            count = np.full(batches, float(table.shape[1]))
            kept: Doubles = np.ones(())
            pivot = table[:, 0]
        else:
            mask = keep.reshape(batches, -1)
            count = mask.sum(axis=1).astype(np.float64)
            table = np.where(mask, table, 0.0)
            kept = mask.astype(np.float64)
            pivot = table[np.arange(batches), mask.argmax(axis=1)]
        some = np.maximum(count, 1.0)
        # From one of the values, so that equal values have exactly no variance, then from the mean.
        offset = (table - pivot[:, None]) * kept
        mean = offset.sum(axis=1) / some
        offset = (offset - mean[:, None]) * kept
        # The mean itself is rounded: what is left of the first moment corrects it and the second.
        left = offset.sum(axis=1) / some
        square = offset * offset
        return cls(
            count=count,
            mean=pivot + (mean + left),
            m2=np.maximum(square.sum(axis=1) - count * left * left, 0.0),
            m3=(square * offset).sum(axis=1),
            m4=(square * square).sum(axis=1),
        )

    @_QUIET
    def __add__(self, other: Moments) -> Moments:
        """Merge batch with batch."""
        na, nb = self.count, other.count
        n = na + nb
        safe = np.maximum(n, 1.0)
        d = np.where((na > 0) & (nb > 0), other.mean - self.mean, 0.0)
        mean = np.where(na == 0, other.mean, np.where(nb == 0, self.mean, self.mean + d * nb / safe))
        m2 = self.m2 + other.m2 + d**2 * na * nb / safe
        m3 = self.m3 + other.m3 + d**3 * na * nb * (na - nb) / safe**2
        m3 += 3 * d * (na * other.m2 - nb * self.m2) / safe
        m4 = self.m4 + other.m4 + d**4 * na * nb * (na**2 - na * nb + nb**2) / safe**3
        m4 += 6 * d**2 * (na**2 * other.m2 + nb**2 * self.m2) / safe**2
        m4 += 4 * d * (na * other.m3 - nb * self.m3) / safe
        return Moments(count=n, mean=mean, m2=m2, m3=m3, m4=m4)

    def whole(self) -> Moments:
        """Return the moments of all batches together, arrays of shape (1,)."""
        try:
            return self._whole
        except AttributeError:
            parts = self
        while parts.count.size > 1:
            if parts.count.size % 2:
                parts = parts._padded()
            parts = parts._slice(slice(0, None, 2)) + parts._slice(slice(1, None, 2))
        object.__setattr__(self, "_whole", parts)
        return parts

    @_QUIET
    def leave_one_out(self) -> tuple[Doubles, Doubles, Doubles]:
        """Return count, mean and m2 of the whole first, then without each batch: arrays of shape (batches + 1,)."""
        whole = self.whole()
        n, mean, m2 = whole.count[0], whole.mean[0], whole.m2[0]
        count = n - self.count
        shift = (self.mean - mean) * np.where(count > 0, self.count / np.maximum(count, 1.0), 0.0)
        gone = self.m2 + self.count * (self.mean - mean) ** 2 * n / np.maximum(count, 1.0)
        return (
            np.concatenate(([n], count)),
            np.concatenate(([mean], mean - shift)),
            np.maximum(np.concatenate(([m2], m2 - gone)), 0.0),
        )

    @property
    def total(self) -> int:
        """Number of values in all batches."""
        return int(self.count.sum())

    @property
    def variance(self) -> float:
        """Unbiased variance over all batches; 0 with fewer than two values."""
        whole = self.whole()
        return float(whole.m2[0] / max(whole.count[0] - 1.0, 1.0))

    @property
    def average(self) -> float:
        """Mean over all batches."""
        return float(self.whole().mean[0])

    @property
    @_QUIET
    def kurtosis(self) -> float | None:
        """Fourth central moment over the squared second, 3 for a normal distribution; None where it does not exist."""
        whole = self.whole()
        ratio = float(whole.count[0] * whole.m4[0] / whole.m2[0] ** 2)
        return ratio if math.isfinite(ratio) else None

    @_QUIET
    def sums_about_zero(self) -> tuple[float, float]:
        """Return the sums of squares and of fourth powers, about zero, over all batches."""
        whole = self.whole()
        n, m, m2, m3, m4 = whole.count[0], whole.mean[0], whole.m2[0], whole.m3[0], whole.m4[0]
        return float(m2 + n * m * m), float(m4 + 4 * m * m3 + 6 * m * m * m2 + n * m**4)

    def _slice(self, part: slice) -> Moments:
        return Moments(
            count=self.count[part], mean=self.mean[part], m2=self.m2[part], m3=self.m3[part], m4=self.m4[part]
        )

    def _padded(self) -> Moments:
        def pad(values: Doubles) -> Doubles:
            return np.append(values, 0.0)

        return Moments(count=pad(self.count), mean=pad(self.mean), m2=pad(self.m2), m3=pad(self.m3), m4=pad(self.m4))


@dataclass(frozen=True, slots=True, kw_only=True)
class Series:
    """Moments of one figure per path, and what the counted case needs. Adds with `+`.

    `events` counts the values that are not zero, `largest` and `smallest` are their largest and smallest magnitude (0
    without events), `distinct` the values met if they are at most five, else None. `nonfinite` counts the paths that
    this arm alone made infinite or NaN: they are in no moment.
    """

    moments: Moments
    events: int
    largest: float
    smallest: float
    distinct: frozenset[float] | None
    nonfinite: int

    @classmethod
    def of(cls, values: Doubles, keep: npt.NDArray[np.bool_] | None = None) -> Series:
        """Return the series of a block's values (paths,); `keep` leaves out the paths that the reference lost."""
        finite = np.isfinite(values)
        if finite.all():
            mask = keep
            lost = 0
        else:
            mask = finite if keep is None else finite & keep
            lost = int(np.count_nonzero(~finite if keep is None else keep & ~finite))
        seen = values if mask is None else values[mask]
        sizes = np.abs(seen[seen != 0.0])
        return cls(
            moments=Moments.of(values if finite.all() else np.where(finite, values, 0.0), mask),
            events=int(sizes.size),
            largest=float(sizes.max()) if sizes.size else 0.0,
            smallest=float(sizes.min()) if sizes.size else 0.0,
            distinct=_distinct(seen),
            nonfinite=lost,
        )

    def __add__(self, other: Series) -> Series:
        """Merge with the series of further paths."""
        both = None if self.distinct is None or other.distinct is None else self.distinct | other.distinct
        small = [s.smallest for s in (self, other) if s.events]
        return Series(
            moments=self.moments + other.moments,
            events=self.events + other.events,
            largest=max(self.largest, other.largest),
            smallest=min(small, default=0.0),
            distinct=both if both is not None and len(both) <= _MOST_DISTINCT else None,
            nonfinite=self.nonfinite + other.nonfinite,
        )

    @property
    def counted(self) -> bool:
        """Whether the figure takes at most five values, so that events are counted."""
        return self.distinct is not None

    @property
    def effective_size(self) -> float:
        """(sum x^2)^2 / sum x^4: how many paths carry the second moment; 0 without events, or where a sum overflows."""
        second, fourth = self.moments.sums_about_zero()
        return second * second / fourth if 0 < fourth < math.inf else 0.0


def _distinct(seen: Doubles) -> frozenset[float] | None:
    if len(set(seen[:64].tolist())) > _MOST_DISTINCT:
        return None  # the usual case, without sorting the block
    values = np.unique(seen)
    return frozenset(values.tolist()) if values.size <= _MOST_DISTINCT else None

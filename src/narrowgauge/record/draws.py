"""The parts of an audit's record that approximate draws fill; an audit without [draws] has none of them."""

from __future__ import annotations

from typing import Literal

from narrowgauge.record.plan import Entry

__all__ = ["DrawsEntry", "OrderEntry", "PartsEntry", "SeparationEntry"]


class DrawsEntry(Entry, frozen=True, kw_only=True):
    """The map from uniforms to approximate normals: a built-in kind or a function, its size, and how good it is.

    Of a user's function the figures are computed from midpoints. `mean_square_error` is E[(Z~ - Z)^2] on one uniform.
    """

    approximate: str
    cells: int | None
    intervals: int | None
    degree: int | None
    mean: float
    variance: float
    mean_square_error: float


class PartsEntry(Entry, frozen=True, kw_only=True):
    """Var R to the reference on one level, in the squared unit of the quantity.

    `arithmetic` is that of the format with exact draws, `draws` that of float64 with approximate draws, `both` that of
    the format with approximate draws.
    `ratio` is draws over arithmetic, None where too few paths carry one of them; `larger` what its interval shows.
    """

    level: int
    arithmetic: float | None
    arithmetic_se: float | None
    draws: float | None
    draws_se: float | None
    both: float | None
    both_se: float | None
    ratio: float | None
    ratio_low: float | None
    ratio_high: float | None
    larger: Literal["arithmetic", "draws"] | None


class OrderEntry(Entry, frozen=True, kw_only=True):
    """Var R ~ h^slope over `levels`, for an arm with approximate draws; None where `reason` says why there is none."""

    slope: float | None
    slope_low: float | None
    slope_high: float | None
    levels: list[int]
    reason: str | None


class SeparationEntry(Entry, frozen=True, kw_only=True):
    """For one quantity: the parts by format and level, and the orders of the corrections by arm."""

    parts: dict[str, list[PartsEntry]]
    orders: dict[str, OrderEntry]

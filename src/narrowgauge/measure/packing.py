"""A tally as bytes and back, each float64 bit for bit: what the ledger keeps and what workers send.

The text is MessagePack of nested arrays in the order of the fields; moments are little-endian float64. Equal tallies
have equal bytes.
"""

from __future__ import annotations

from typing import Any

import msgspec
import numpy as np

from narrowgauge.measure.moments import Moments, Series
from narrowgauge.measure.tally import LevelTally, QuantityTally, Raised

__all__ = ["packed", "unpacked"]

_DOUBLES = np.dtype("<f8")
_MOMENTS = ("count", "mean", "m2", "m3", "m4")


def packed(tally: LevelTally) -> bytes:
    """Return a tally as bytes that `unpacked` turns back, bit for bit and in the order of its mappings."""
    document = [
        tally.level,
        tally.paths,
        tally.dropped,
        tally.blocks,
        [[_text(name), _quantity(one)] for name, one in tally.quantities.items()],
        [
            [arm, _text(one.kind), _text(one.message), None if one.file is None else _text(one.file), one.line]
            for arm, one in tally.raised.items()
        ],
    ]
    return msgspec.msgpack.encode(document)


def unpacked(data: bytes) -> LevelTally:
    """Return the tally that was packed; raises ValueError for bytes that are none."""
    try:
        level, paths, dropped, blocks, quantities, raised = msgspec.msgpack.decode(data)
        return LevelTally(
            level=level,
            paths=paths,
            dropped=dropped,
            blocks=blocks,
            quantities={_read(name): _quantity_of(one) for name, one in quantities},
            raised={
                arm: Raised(
                    kind=_read(kind), message=_read(message), file=None if file is None else _read(file), line=line
                )
                for arm, kind, message, file, line in raised
            },
        )
    except (TypeError, AttributeError, msgspec.DecodeError) as problem:
        raise ValueError(f"not a packed tally: {problem}") from None


def _text(text: str) -> bytes:
    """Return text as bytes, unpaired surrogates included: a kernel may raise anything."""
    return text.encode("utf-8", "surrogatepass")


def _read(data: bytes) -> str:
    return data.decode("utf-8", "surrogatepass")


def _quantity(tally: QuantityTally) -> list[Any]:
    return [
        [[arm, _series(one)] for arm, one in tally.values.items()],
        [[arm, _series(one)] for arm, one in tally.errors.items()],
        [[arm, _series(one)] for arm, one in tally.differences.items()],
        [[*pair, _series(one)] for pair, one in tally.corrections.items()],
        None if tally.coarse is None else _moments(tally.coarse),
    ]


def _quantity_of(fields: list[Any]) -> QuantityTally:
    values, errors, differences, corrections, coarse = fields
    return QuantityTally(
        values={arm: _series_of(one) for arm, one in values},
        errors={arm: _series_of(one) for arm, one in errors},
        differences={arm: _series_of(one) for arm, one in differences},
        corrections={(narrow, wide): _series_of(one) for narrow, wide, one in corrections},
        coarse=None if coarse is None else _moments_of(coarse),
    )


def _series(series: Series) -> list[Any]:
    distinct = None if series.distinct is None else sorted(series.distinct)
    return [_moments(series.moments), series.events, series.largest, series.smallest, distinct, series.nonfinite]


def _series_of(fields: list[Any]) -> Series:
    moments, events, largest, smallest, distinct, nonfinite = fields
    return Series(
        moments=_moments_of(moments),
        events=events,
        largest=largest,
        smallest=smallest,
        distinct=None if distinct is None else frozenset(distinct),
        nonfinite=nonfinite,
    )


def _moments(moments: Moments) -> bytes:
    return b"".join(getattr(moments, name).astype(_DOUBLES).tobytes() for name in _MOMENTS)


def _moments_of(data: bytes) -> Moments:
    table = np.frombuffer(data, _DOUBLES).reshape(len(_MOMENTS), -1).astype(np.float64)
    return Moments(**dict(zip(_MOMENTS, table, strict=True)))

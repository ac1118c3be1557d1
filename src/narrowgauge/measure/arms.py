"""The arms of an audit, and which corrections between them a scheme could use."""

from __future__ import annotations

from collections.abc import Sequence

from narrowgauge.arithmetic.formats import FORMATS

__all__ = ["PLAIN", "REFERENCE", "arms_of", "pairs_of"]

REFERENCE = "float64"
PLAIN = "plain NumPy"  # the kernel as it is, without the emulation: no arm


def arms_of(names: Sequence[str]) -> tuple[str, ...]:
    """Return the arms without repeats, the reference first, then from least to most precise."""
    rest = sorted(set(names) - {REFERENCE}, key=lambda name: (FORMATS[name].precision, name))
    return (REFERENCE, *rest)


def pairs_of(arms: Sequence[str], wide: Sequence[str]) -> tuple[tuple[str, str], ...]:
    """Return the (narrow, wide) pairs whose correction is measured.

    Every arm against the reference, which judges bias, and against each wide format of more precision.
    """
    targets = [*dict.fromkeys([*wide, REFERENCE])]
    return tuple((a, b) for a in arms for b in targets if a != b and FORMATS[b].precision > FORMATS[a].precision)

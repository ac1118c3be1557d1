"""The arms of an audit, and which corrections between them a scheme could use."""

from __future__ import annotations

from collections.abc import Sequence

from narrowgauge.kernel.arms import Arm, wider

__all__ = ["PLAIN", "REFERENCE", "arms_of", "pairs_of"]

REFERENCE = "float64"
PLAIN = "plain NumPy"  # the kernel as it is, without the emulation: no arm


def arms_of(names: Sequence[str]) -> tuple[str, ...]:
    """Return the arms without repeats: the reference, the others with exact draws from least to most precise, the rest.

    Those with approximate draws come in the same order.
    """

    def place(name: str) -> tuple[bool, int, str]:
        arm = Arm.named(name)
        return not arm.exact, arm.form.precision, name

    return (REFERENCE, *sorted(set(names) - {REFERENCE}, key=place))


def pairs_of(arms: Sequence[str], wide: Sequence[str]) -> tuple[tuple[str, str], ...]:
    """Return the (narrow, wide) pairs whose correction is measured.

    Every arm against the reference, which judges bias, and against each wide arm that can correct it.
    """
    targets = [*dict.fromkeys([*wide, REFERENCE])]
    return tuple((a, b) for a in arms for b in targets if wider(b, a))

"""How a gate measures: the reduced audit of a policy's formats, its own seeds, and one stage after the other.

What is judged, and how, is handed in: this module draws.
"""

from __future__ import annotations

from collections.abc import Collection

import msgspec
import numpy as np

from narrowgauge.draws.streams import GRAIN, Purpose
from narrowgauge.kernel.arms import Arm
from narrowgauge.kernel.auditfile import AuditFile
from narrowgauge.kernel.gatetable import GateSettings
from narrowgauge.measure.arms import REFERENCE

__all__ = ["gate_seed", "reduced"]


def gate_seed(seed: int, stage: int) -> int:
    """Return the seed of one stage, from 1 on, of the gate that belongs to a policy's seed or was asked for.

    Every stage of every gate, and the audit itself, draws from streams of its own, and the same commit gets the same.
    """
    key = np.random.SeedSequence(seed, spawn_key=(int(Purpose.GATE), stage))
    return int(key.generate_state(1, np.uint64)[0] >> np.uint64(1))


def reduced(
    file: AuditFile, arms: Collection[str], settings: GateSettings, *, seed: int, confidence: float
) -> AuditFile:
    """Return the audit that a gate runs: every level, and of the narrow formats those that the policy uses.

    `arms` are the names of the arms in the policy. The wide formats stay: edges are measured against them. A policy of
    the reference alone is tried in the first narrow format. Scenarios and lines are left out: they are not held.
    """
    used = [Arm.named(name) for name in arms if name != REFERENCE]
    exact = {arm.format for arm in used if arm.exact} - {REFERENCE}
    cheap = {arm.format for arm in used if not arm.exact}
    narrow = tuple(name for name in file.formats.narrow if name in exact) or file.formats.narrow[:1]
    draws = None
    if file.draws is not None and cheap:
        formats = tuple(name for name in file.draws.formats if name in cheap)
        draws = msgspec.structs.replace(file.draws, formats=formats)
    branches = file.branches
    if branches is not None and branches.paths is not None:
        branches = msgspec.structs.replace(branches, paths=min(branches.paths, settings.paths))
    most = file.sampling.most_paths if settings.most_paths is None else settings.most_paths
    sampling = msgspec.structs.replace(
        file.sampling,
        block=min(file.sampling.block, -(-settings.paths // GRAIN) * GRAIN),
        paths=settings.paths,
        most_paths=max(most, settings.paths),
        confidence=confidence,
        seed=seed,
    )
    return msgspec.structs.replace(
        file,
        formats=msgspec.structs.replace(file.formats, narrow=narrow),
        draws=draws,
        branches=branches,
        sampling=sampling,
        domain=None,
        lines=None,
    )

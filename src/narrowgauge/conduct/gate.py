"""How a gate measures: the reduced audit of a policy's formats, its own seeds, and one stage after the other.

What is judged, and how, is handed in: this module draws.
"""

from __future__ import annotations

from collections.abc import Collection, Mapping, Sequence

import msgspec
import numpy as np

from narrowgauge.conduct.domain import Corners
from narrowgauge.draws.streams import GRAIN, Purpose
from narrowgauge.judge.gain import Scheme
from narrowgauge.kernel.arms import Arm
from narrowgauge.kernel.auditfile import AuditFile
from narrowgauge.kernel.domaintable import AxisTable, DomainTable
from narrowgauge.kernel.gatetable import GateSettings
from narrowgauge.measure.arms import REFERENCE
from narrowgauge.record.policy import CostPart, ParameterPart

__all__ = ["claimed_corners", "gate_seed", "reduced"]


def gate_seed(seed: int, stage: int) -> int:
    """Return the seed of one stage, from 1 on, of the gate that belongs to a policy's seed or was asked for.

    Every stage of every gate, and the audit itself, draws from streams of its own, and the same commit gets the same.
    """
    key = np.random.SeedSequence(seed, spawn_key=(int(Purpose.GATE), stage))
    return int(key.generate_state(1, np.uint64)[0] >> np.uint64(1))


def reduced(
    file: AuditFile, arms: Collection[str], cost: CostPart, settings: GateSettings, *, seed: int, confidence: float
) -> AuditFile:
    """Return the audit that a gate runs: every level, and of the narrow formats those that the policy uses.

    `arms` are the names of the arms in the policy. The wide formats stay: edges are measured against them. A policy of
    the reference alone is tried in the first narrow format. Measured costs are those of the policy's `cost`: a gate is
    not about the speed of the machine that it runs on. Lines are left out, and the scenarios of [domain]: what a policy
    claims of them is tried by `claimed_corners`.
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
    made = msgspec.structs.replace(
        file,
        formats=msgspec.structs.replace(file.formats, narrow=narrow),
        draws=draws,
        branches=branches,
        sampling=sampling,
        domain=None,
        lines=None,
    )
    if cost.source != "measured" or not set(made.used_formats) <= set(cost.steps):
        return made
    return msgspec.structs.replace(made, cost=msgspec.structs.replace(made.cost, measured=False, **cost.steps))


def claimed_corners(
    file: AuditFile,
    parameters: Mapping[str, ParameterPart],
    arms: Mapping[int, Sequence[str]],
    *,
    quantities: int,
    least_edge: float,
) -> Corners | None:
    """Return what a gate tries of the box that a policy claims, by the `arms` of each level; None where it claims none.

    `file` is the audit that the gate runs. A corner has the paths of a scenario at the first look, and goes on as the
    levels of the gate do, until its edge has come to `least_edge`.
    """
    sides = {
        name: AxisTable(low=part.low, high=part.high, scale=part.scale or "linear")
        for name, part in parameters.items()
        if part.low is not None and part.high is not None
    }
    if not sides:
        return None
    domain = DomainTable(parameters=sides)
    return Corners(
        domain=msgspec.structs.replace(domain, most_paths=max(domain.paths, file.sampling.most_paths)),
        schemes={
            level: Scheme(kind="split" if wide else "alone", narrow=narrow, wide=wide[0] if wide else None)
            for level, (narrow, *wide) in arms.items()
        },
        least_edge=least_edge,
        quantities=quantities,
    )

"""How much is measured, for the report and for a test that all of it runs."""

from __future__ import annotations

from dataclasses import dataclass

__all__ = ["SIZES", "Size"]


@dataclass(frozen=True, slots=True, kw_only=True)
class Size:
    """Sizes of every benchmark; `name` is how a program is told."""

    name: str
    blocks: tuple[int, ...]  # paths of a kernel that is timed alone
    steps: int  # of its paths
    watched_steps: int  # of its paths where every number is looked at
    least: float  # seconds of one measurement of it
    rounds: int
    slow_rounds: int  # of whole audits
    finest: int  # level of the ladder of a whole audit
    paths: int  # a level of it
    worker_seconds: float  # least duration of the audit that is shared among workers
    memory_paths: tuple[int, int]


SIZES: dict[str, Size] = {
    size.name: size
    for size in (
        Size(
            name="full",
            blocks=(4096, 8192, 16384, 32768, 65536, 131072),
            steps=16,
            watched_steps=64,
            least=0.02,
            rounds=15,
            slow_rounds=5,
            finest=8,
            paths=32768,
            worker_seconds=60.0,
            memory_paths=(1_000_000, 10_000_000),
        ),
        Size(
            name="quick",
            blocks=(1024, 2048),
            steps=2,
            watched_steps=2,
            least=0.0,
            rounds=2,
            slow_rounds=1,
            finest=1,
            paths=1024,
            worker_seconds=0.0,
            memory_paths=(1024, 2048),
        ),
    )
}

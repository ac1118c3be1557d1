"""Small audits of the examples with their policies, and the mistakes that a gate has to catch. INVENTED DATA."""

import re
import shutil
from dataclasses import dataclass, replace
from pathlib import Path

from narrowgauge.api import gate_held, run_audit
from narrowgauge.kernel.auditfile import read_audit_file
from narrowgauge.measure.workers import Workers
from narrowgauge.policy.drawup import draw_up, read_audit, write_policy
from narrowgauge.policy.gatefile import held_to

EXAMPLES = Path(__file__).parents[2] / "examples"
_SAMPLING = {"block": 16384, "paths": 16384, "most_paths": 131072}

# By base: the example, the finest level, targets, and what is replaced in the kernel before its policy is drawn up.
COMPENSATED = (
    (
        "    total = np.zeros(paths, dtype=dW.dtype)\n",
        "    total = np.zeros(paths, dtype=dW.dtype)\n    behind = np.zeros(paths, dtype=dW.dtype)\n",
    ),
    (
        "        total += np.minimum(water, turbine_limit) * h\n",
        "        addend = np.minimum(water, turbine_limit) * h - behind\n"
        "        grown = total + addend\n"
        "        behind = (grown - total) - addend\n"
        "        total = grown\n",
    ),
)
BASES = {
    "reserve": ("reserve", 3, "{ option = 0.1, output = 0.004 }", ()),
    "compensated": ("reserve", 6, "{ option = 0.1, output = 0.004 }", COMPENSATED),
    "branched": ("reserve", 2, "{ option = 0.1, output = 0.004 }", ()),
    "boxed": ("reserve", 2, "{ option = 0.1, output = 0.004 }", ()),
    "membrane": ("membrane", 2, "{ energy = 0.01, crossed = 0.02 }", ()),
}


BOX = """
[domain]
parameters.price_volatility = { low = 0.25, high = 0.45 }
parameters.fee = { low = 45.0, high = 60.0 }
scenarios = 8
most_paths = 8192
"""


def prepared(base, folder):
    """Write the base's kernel and audit file into a folder, audit it, draw up its policy, and return the audit file."""
    example, finest, rmse, changes = BASES[base]
    folder.mkdir(parents=True, exist_ok=True)
    source = (EXAMPLES / example / f"{example}.py").read_text(encoding="utf-8")
    if base == "branched":  # the low branch is a function of its own, with a name of its own for the water
        low = source[source.index("def value(") :].replace("def value(", "def cheap(").replace("water", "flow")
        source += f"\n\n{low}"
    (folder / f"{example}.py").write_text(changed(source, changes), encoding="utf-8")
    text = (EXAMPLES / example / f"{example}.toml").read_text(encoding="utf-8")
    values = {"finest": finest, "rmse": rmse, **_SAMPLING, "narrow": '["float16", "float32"]'}
    for key, value in values.items():
        text, found = re.subn(rf"^{key} = [^#\n]*", f"{key} = {value}", text, flags=re.MULTILINE)
        assert found == 1, key
    audit = folder / "audit.toml"
    text = text.partition("\n[policy]\n")[0] + '\n[policy]\nfile = "held.policy.json"\n'
    text += {"branched": '\n[branches]\nlow = "reserve.py:cheap"\n', "boxed": BOX}.get(base, "")
    audit.write_text(text, encoding="utf-8")
    run_audit(read_audit_file(audit), folder / "out")
    write_policy(draw_up(*read_audit(folder / "out")), folder / "held.policy.json")
    return audit


def changed(source, changes):
    """Return a kernel's source with texts replaced, each of which stands there once."""
    for old, new in changes:
        assert source.count(old) == 1, old
        source = source.replace(old, new)
    return source


def gated(audit, seed=None, *, watch=False):
    """Hold the gate in this process; with `watch` lost additions and subnormals are counted, whatever the file says."""
    held = held_to(audit)
    if watch:
        held = replace(held, settings=replace(held.settings, watch=True))
    return gate_held(held, seed=seed, who=Workers())


def with_mistake(audit, mistake, folder):
    """Copy an audit file with its policy and its kernel into a folder, with a mistake in the kernel."""
    shutil.copytree(audit.parent, folder, ignore=shutil.ignore_patterns("out", "__pycache__"))
    (kernel,) = folder.glob("*.py")
    kernel.write_text(changed(kernel.read_text(encoding="utf-8"), mistake.changes), encoding="utf-8")
    return folder / "audit.toml"


@dataclass(frozen=True, kw_only=True)
class Mistake:
    """What somebody might do to a kernel of a base, and the checks of which one has to see it."""

    base: str
    changes: tuple
    checks: tuple


def _of(base, *changes, by):
    return Mistake(base=base, changes=changes, checks=by)


_STEP = "        x += price_reversion * h * (price_level - x) + price_volatility * dW[n, 0]\n"
_TOTAL = "        total += np.minimum(water, turbine_limit) * h\n"
_SAVED = "    saved = np.exp(x) * np.maximum(q, 0.0) - fee\n"
_MOVE = "        x += drift * h + np.sqrt(2.0 * mobility) * dW[n]\n"
_RETURN = 'return {"energy": reading, "crossed": x > centre}'

MISTAKES = {
    "reserve: an inflow in watts": _of(
        "reserve",
        ("    q = np.full(paths, inflow_start, dtype=dW.dtype)\n", "    q = np.full(paths, 1e6 * inflow_start)\n"),
        ("        water = np.maximum(q, 0.0)\n", "        water = np.maximum(q, 0.0) / 1e6\n"),
        ("        q += inflow_reversion * h", "        q += 1e6 * inflow_reversion * h"),
        ("+ inflow_volatility * np.sqrt(water) * dB", "+ 1e6 * inflow_volatility * np.sqrt(water) * dB"),
        ("np.exp(x) * np.maximum(q, 0.0)", "np.exp(x) * np.maximum(q / 1e6, 0.0)"),
        by=("finite",),
    ),
    "reserve: a price with an offset": _of(
        "reserve",
        ("    x = np.full(paths, price_start, dtype=dW.dtype)\n", "    x = np.full(paths, price_start + 60.0)\n"),
        ("h * (price_level - x)", "h * (price_level + 60.0 - x)"),
        ("np.exp(x) * np.maximum(q", "np.exp(x - 60.0) * np.maximum(q"),
        by=("error variance", "gain"),
    ),
    "reserve: increments added one after the other": _of(
        "reserve",
        (
            _STEP,
            "        x = x + price_reversion * h * price_level - price_reversion * h * x\n"
            "        x = x + price_volatility * dW[n, 0]\n",
        ),
        by=("error variance",),
    ),
    "reserve: a sum that starts far from 0": _of(
        "reserve",
        ("    total = np.zeros(paths, dtype=dW.dtype)\n", "    total = np.full(paths, 100.0)\n"),
        ('"output": total / span', '"output": (total - 100.0) / span'),
        by=("error variance", "gain"),
    ),
    "reserve: a float64 temporary": _of(
        "reserve",
        (_SAVED, _SAVED + "    saved = np.array([float(one) for one in saved])\n"),
        by=("escapes",),
    ),
    "reserve: a doubled volatility": _of(
        "reserve", (_STEP, _STEP.replace("price_volatility", "2.0 * price_volatility")), by=("rmse",)
    ),
    "reserve: a halved volatility of the inflow": _of(
        "reserve", ("+ inflow_volatility * np.sqrt", "+ 0.25 * inflow_volatility * np.sqrt"), by=("gain", "edge")
    ),
    "reserve: a payoff in cents": _of(
        "reserve",
        ("* np.maximum(saved, 0.0)", "* np.maximum(saved * 1e4, 0.0) / 1e4"),
        by=("finite",),
    ),
    "reserve: a finite difference": _of(
        "reserve",
        (
            _SAVED,
            "    q = np.maximum(q, 0.0)\n    saved = (np.exp(x + 0.01) * q - np.exp(x - 0.01) * q) / 0.02 - fee\n",
        ),
        by=("error variance", "gain"),
    ),
    "reserve: a constant that underflows": _of(
        "reserve",
        (_TOTAL, "        total += np.minimum(water, turbine_limit) * h * 1e-8\n"),
        ('"output": total / span', '"output": total / (span * 1e-8)'),
        by=("finite", "error variance"),
    ),
    "reserve: interest by the number of steps": _of(
        "reserve", ("math.exp(-rate * span)", "math.exp(0.05 * steps)"), by=("rmse",)
    ),
    "reserve: a difference of large numbers": _of(
        "reserve",
        ("        water = np.maximum(q, 0.0)\n", "        water = np.maximum((q + 30.0) - 30.0, 0.0)\n"),
        by=("error variance", "gain"),
    ),
    "reserve: an exception in few paths": _of(
        "reserve",
        (_SAVED, _SAVED + '    if (x > 4.9).any():\n        raise ValueError("too dear")\n'),
        by=("run", "finite"),
    ),
    "branched: a sum in another order in the low branch": _of(
        "branched",
        (
            "        q += inflow_reversion * h * (inflow_level - flow) + inflow_volatility * np.sqrt(flow) * dB\n",
            "        q = (q + inflow_reversion * h * (inflow_level - flow)) + inflow_volatility * np.sqrt(flow) * dB\n",
        ),
        by=("branches",),
    ),
    "compensated: a lost compensation": _of(
        "compensated", ("        behind = (grown - total) - addend\n", ""), by=("error variance", "gain")
    ),
    "membrane: a position with an offset": _of(
        "membrane",
        ("    x = np.full(paths, start)\n", "    x = np.full(paths, start + 30.0)\n"),
        ("        y = x - centre\n", "        y = x - (centre + 30.0)\n"),
        ("x > centre}", "x > centre + 30.0}"),
        by=("error variance", "gain"),
    ),
    "membrane: increments added one after the other": _of(
        "membrane",
        (
            _MOVE,
            "        x = x + 0.5 * (drift * h)\n        x = x + 0.5 * (drift * h)\n"
            "        x = x + np.sqrt(2.0 * mobility) * dW[n]\n",
        ),
        by=("error variance",),
    ),
    "membrane: a finite difference": _of(
        "membrane",
        (
            "        slope = 2.0 / width**2 * y * inside\n",
            "        slope = (np.exp(-(((y - 0.004) / width) ** 2)) - np.exp(-(((y + 0.004) / width) ** 2))) / 0.008\n",
        ),
        by=("error variance", "gain"),
    ),
    "membrane: an energy in millionths": _of(
        "membrane", (_RETURN, _RETURN.replace("reading,", "reading * 1e6 / 1e6,")), by=("finite",)
    ),
    "membrane: a doubled diffusion": _of(
        "membrane",
        (
            "        mobility = diffusion * (1.0 - slowing * inside)\n",
            "        mobility = 4.0 * diffusion * (1.0 - slowing * inside)\n",
        ),
        by=("rmse",),
    ),
}

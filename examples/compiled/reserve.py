"""The reserve option of ../reserve on a price that may be negative: the source that reserve.c is held against.

INVENTED DATA: the plant, the contract and every figure are made up.

The plant and its river are those of ../reserve/reserve.py. The price itself, not its logarithm, is the
Ornstein-Uhlenbeck process, as power prices below zero ask for:

    price    dx = price_reversion (price_level - x) dt + price_volatility dW
    inflow   dq = inflow_reversion (inflow_level - q) dt + inflow_volatility sqrt(q) dB

so that the state meets + - * / and square roots alone. Those have one right result in every format, in C as in NumPy;
exp and log have not.
"""

import math

import numpy as np


def value(
    dW,
    h,
    *,
    price_start,
    price_level,
    price_reversion,
    price_volatility,
    inflow_start,
    inflow_level,
    inflow_reversion,
    inflow_volatility,
    correlation,
    turbine_limit,
    fee,
    rate,
):
    """Return, for each path, what the option pays (EUR/h, discounted) and the turbine's mean output (MW).

    `dW` holds Brownian increments, shaped (steps, 2, paths); `h` is the length of a step, in quarters.
    """
    steps, _, paths = dW.shape
    x = np.full(paths, price_start)
    q = np.full(paths, inflow_start)
    total = np.zeros(paths)
    independent = math.sqrt(1.0 - correlation * correlation)
    for n in range(steps):
        water = np.maximum(q, 0.0)
        total = total + np.minimum(water, turbine_limit) * h
        dB = correlation * dW[n, 0] + independent * dW[n, 1]
        x = x + (price_reversion * h * (price_level - x) + price_volatility * dW[n, 0])
        q = q + (inflow_reversion * h * (inflow_level - water) + inflow_volatility * np.sqrt(water) * dB)

    span = steps * h
    saved = x * np.maximum(q, 0.0) - fee
    return {"option": math.exp(-rate * span) * np.maximum(saved, 0.0), "output": total / span}

"""A reserve option sold by a small pumped-storage plant, path by path. INVENTED DATA.

The plant, the contract and every figure in reserve.toml are made up for this example; nothing comes from a real
plant, river, market or contract.

The plant's upper basin is fed by a river. For a premium paid today the buyer of the option may, at the end of
the quarter, take the power that the river then gives and pay a fixed fee instead of the market price. Time
runs in quarters of a year, prices are in EUR/MWh, power is in MW.

    log price   dx = price_reversion (price_level - x) dt + price_volatility dW          price = exp(x)
    inflow      dq = inflow_reversion (inflow_level - q) dt + inflow_volatility sqrt(q) dB

W and B are Brownian motions with correlation `correlation` (much water, low price). The log price is an
Ornstein-Uhlenbeck process, the inflow a square-root process; both are stepped by Euler's scheme. A step can
take the inflow below zero, and drift and root then use max(q, 0): full truncation, "A comparison of biased
simulation schemes for stochastic volatility models", Quantitative Finance 10(2), 2010,
doi 10.1080/14697680802392496 (recalled from memory).
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

    `dW` holds Brownian increments, shaped (steps, 2, paths); `h` is the length of a step, in quarters. Every array has
    the type of `dW`.
    """
    steps, _, paths = dW.shape
    x = np.full(paths, price_start, dtype=dW.dtype)
    q = np.full(paths, inflow_start, dtype=dW.dtype)
    total = np.zeros(paths, dtype=dW.dtype)
    independent = math.sqrt(1.0 - correlation**2)
    for n in range(steps):
        water = np.maximum(q, 0.0)
        total += np.minimum(water, turbine_limit) * h
        dB = correlation * dW[n, 0] + independent * dW[n, 1]
        x += price_reversion * h * (price_level - x) + price_volatility * dW[n, 0]
        q += inflow_reversion * h * (inflow_level - water) + inflow_volatility * np.sqrt(water) * dB

    span = steps * h
    saved = np.exp(x) * np.maximum(q, 0.0) - fee
    return {"option": math.exp(-rate * span) * np.maximum(saved, 0.0), "output": total / span}

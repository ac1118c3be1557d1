"""The kernels that are timed: invented parameters, and no buffer wider than the draws: NumPy runs them in any format.

Each is the function of draws and step size that an audit takes, and each is run as it is in plain NumPy.
"""

import math

import numpy as np


def one_factor(dW, h, *, rate=0.05, volatility=0.2, strike=1.0):
    """Geometric Brownian motion by Euler steps, a call at the end."""
    S = np.full_like(dW[0], 1.0)
    for dw in dW:
        S = S + (rate * h * S + volatility * S * dw)
    return np.maximum(S - strike, 0.0)


def stochastic_volatility(dW, h, *, rate=0.02, reversion=1.5, mean=0.04, spread=0.3, tie=-0.7, strike=1.0):
    """Log price and variance by Euler steps, the variance cut at zero where it enters ("full truncation"), a call."""
    x = np.full_like(dW[0, 0], 0.0)
    v = np.full_like(x, mean)
    rest = math.sqrt(1.0 - tie * tie)
    for first, second in dW:
        above = np.maximum(v, 0.0)
        root = np.sqrt(above)
        x = x + ((rate - 0.5 * above) * h + root * first)
        v = v + (reversion * (mean - above) * h + spread * root * (tie * first + rest * second))
    return np.maximum(np.exp(x) - strike, 0.0)


def small_matrix(dW, h, *, root, rate=0.03, volatility=0.25, strike=1.0):
    """Three correlated assets, (3, 3) @ (3, paths) a step, a call on their mean."""
    S = np.full_like(dW[0], 1.0)
    for dw in dW:
        S = S + S * (rate * h + volatility * (root @ dw))
    return np.maximum((S[0] + S[1] + S[2]) * (1.0 / 3.0) - strike, 0.0)


def exponentials(z, h, *, rate=0.05, volatility=0.3):
    """Exact lognormal steps, exp each time, and the logarithm of their running mean."""
    drift, spread = (rate - 0.5 * volatility * volatility) * h, volatility * math.sqrt(h)
    S = np.full_like(z[0], 1.0)
    total = np.full_like(z[0], 0.0)
    for draw in z:
        S = S * np.exp(drift + spread * draw)
        total = total + np.log(S) * h
    return np.log(S) - total

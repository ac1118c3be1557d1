"""Adapters of 3 to 10 lines: what a user writes to audit a simulator of a public package as it is."""

from __future__ import annotations

from typing import NamedTuple


class Adapter(NamedTuple):
    """A simulator of a public package: the package as it is imported, the adapter's text, and what it returns."""

    package: str
    text: str
    refused: str = ""  # for one that the audit refuses: where and why, as a pattern, since versions differ in lines


ADAPTERS = {
    # Two factors in one array of (paths, factors): einsum, matmul, cholesky, eye; the draws are SciPy's `rvs`.
    "pyesg, Heston": Adapter(
        "pyesg",
        """
from pyesg import HestonProcess

def value(rng, h, *, steps, paths):
    model = HestonProcess(mu=0.05, theta=0.04, kappa=0.8, sigma=0.3, rho=-0.5)
    return model.scenarios([1.0, 0.04], h, paths, steps)[:, -1, 0]
""",
    ),
    # A generator made from a seed inside, astype(float64) and isinstance at each step, `** 0.5` of the state.
    "pyesg, square root": Adapter(
        "pyesg",
        """
from pyesg import CoxIngersollRossProcess

def value(rng, h, *, steps, paths):
    return CoxIngersollRossProcess(mu=0.05, sigma=0.02, theta=0.1).scenarios(0.04, h, paths, steps, 7)[:, -1]
""",
    ),
    # Blocks of np.random drawn ahead, paths first, Poisson counts in np.where; a data class on dates.
    "FinStoch, jumps": Adapter(
        "FinStoch",
        """
from FinStoch import MertonJumpDiffusion

def value(rng, h, *, steps, paths):
    model = MertonJumpDiffusion(S0=1.0, mu=0.05, sigma=0.2, num_paths=paths, start_date="2024-01-01",
        end_date=f"2024-{1 + steps:02d}-02", granularity="MS", lambda_j=0.5, mu_j=-0.1, sigma_j=0.1)
    return model.simulate()[:, -1]
""",
    ),
    # np.dot of a constant factor with an array of two rows of draws; `+=` on a slice of the state.
    "FinStoch, Heston": Adapter(
        "FinStoch",
        """
from FinStoch import HestonModel

def value(rng, h, *, steps, paths):
    model = HestonModel(S0=1.0, mu=0.05, sigma=0.2, num_paths=paths, start_date="2024-01-01",
        end_date=f"2024-{1 + steps:02d}-02", granularity="MS", v0=0.04, theta=0.04, kappa=1.0, rho=-0.5)
    return model.simulate(method="milstein")[0][:, -1]
""",
    ),
    # One path per call, three nested scalar loops, buffers that a step reads back.
    "fbm, recursion": Adapter(
        "fbm",
        """
import numpy as np
from fbm import FBM

def value(rng, h, *, steps, paths):
    made = FBM(n=steps, hurst=0.7, length=1, method="hosking")
    return np.array([made.fbm()[-1] for _ in range(paths)])
""",
    ),
    # One path per call; a Cholesky factor filled by scalars and kept on the object; insert and cumsum.
    "fbm, factor": Adapter(
        "fbm",
        """
import numpy as np
from fbm import FBM

def value(rng, h, *, steps, paths):
    made = FBM(n=steps, hurst=0.7, length=1, method="cholesky")
    return np.array([made.fbm()[-1] for _ in range(paths)])
""",
    ),
    # Draws handed in; a matrix in a cache of functools, `z @ B.T`, mean over the dates, a payoff.
    "asian_option_pricer, bridge": Adapter(
        "asian_option_pricer",
        """
from asian_option_pricer.models import AsianOptionParams
from asian_option_pricer.paths import build_paths, payoff_from_paths

def value(rng, h, *, steps, paths):
    asked = AsianOptionParams(S0=1.0, K=1.0, r=0.05, sigma=0.2, T=1.0, N=steps, option_type="call")
    made = build_paths(asked, rng.standard_normal((paths, steps)), method="brownian_bridge")
    return payoff_from_paths(made, asked.K, asked.option_type)
""",
    ),
    # One path per call, Python floats from np.random, as many draws as there are jumps, a boolean where.
    "financial_stochastic_processes, jumps": Adapter(
        "financial_stochastic_processes",
        """
import numpy as np
from financial_stochastic_processes import StochasticAssetPriceSimulator

def value(rng, h, *, steps, paths):
    made = StochasticAssetPriceSimulator(S0=1.0, T=1.0, dt=h)
    return np.array([made.simulate_jump_diffusion()[-1] for _ in range(paths)])
""",
    ),
    # Fourier synthesis: the state becomes complex.
    "fbm, circulant": Adapter(
        "fbm",
        """
import numpy as np
from fbm import FBM

def value(rng, h, *, steps, paths):
    made = FBM(n=steps, hurst=0.7, length=1, method="daviesharte")
    return np.array([made.fbm()[-1] for _ in range(paths)])
""",
        r"fbm/fbm\.py:\d+: the kernel fixes dtype complex128; accepted: float64 or none, since the audit chooses the "
        "format$",
    ),
}

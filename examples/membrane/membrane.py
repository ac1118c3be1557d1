"""A particle that diffuses through a membrane: its energy, and whether it got across. INVENTED DATA.

Every figure in membrane.toml is made up for this example; nothing comes from a measurement.

The particle is held in a trap around the membrane's centre, and the membrane pushes it out, which makes two
wells, one on each side. Inside the membrane it also moves more slowly. With y = x - centre and
g(y) = exp(-(y / width)^2):

    energy      U(y) = stiffness y^2 / 2 + barrier g(y)           in units of kT
    mobility    D(y) = diffusion (1 - slowing g(y))               in nm^2 per microsecond
    motion      dx = (D'(y) - D(y) U'(y)) dt + sqrt(2 D(y)) dW    overdamped Langevin equation, Ito form

The term D' keeps the stationary density at exp(-U) although the mobility varies (common practice, no source).
Euler's scheme; positions in nm, time in microseconds. A detector of time constant `memory` reads the energy.
"""

import math

import numpy as np


def crossing(dW, h, *, start, centre, stiffness, barrier, width, diffusion, slowing, memory):
    """Return, for each path, the detector's last reading (kT) and whether the particle ended on the far side.

    `dW` holds Brownian increments, shaped (steps, paths); `h` is the length of a step, in microseconds.
    """
    steps, paths = dW.shape
    x = np.full(paths, start)
    reading = np.zeros(paths)
    keep = math.exp(-h / memory)
    for n in range(steps):
        y = x - centre
        inside = np.exp(-((y / width) ** 2))
        energy = 0.5 * stiffness * y**2 + barrier * inside
        reading = keep * reading + (1.0 - keep) * energy
        slope = 2.0 / width**2 * y * inside
        mobility = diffusion * (1.0 - slowing * inside)
        drift = diffusion * slowing * slope + mobility * (barrier * slope - stiffness * y)
        x += drift * h + np.sqrt(2.0 * mobility) * dW[n]
    return {"energy": reading, "crossed": x > centre}

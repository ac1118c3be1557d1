"""From `[draws]` to the map that makes approximate normals: a built-in one, or the user's function held to its word."""

from __future__ import annotations

from collections.abc import Callable
from typing import Any

import numpy as np
import numpy.typing as npt

from narrowgauge.draws.approximate import Approximation, Constant, Linear, Polynomial
from narrowgauge.draws.normals import exact_normals
from narrowgauge.errors import AuditFileError, said
from narrowgauge.kernel.auditfile import AuditFile
from narrowgauge.kernel.loading import KernelSource, approximation_function

__all__ = ["approximation_of", "quality"]

_KEY = "draws.approximate"
_ACCEPTED = "a function that returns a finite float64 normal for each uniform in (0, 1), in an array of the same shape"
_MIDPOINTS = 2**20
_SOME = 8  # an eighth of them is asked for again: the lowest, whose ranks and shares among themselves are others
_SAME = 1e-9  # a function of NumPy's may differ in its last places by where in an array a number stands

Doubles = npt.NDArray[np.float64]


def approximation_of(file: AuditFile, kernel: KernelSource) -> Approximation | None:
    """Return the map from uniforms to approximate normals that an audit asks for, or None.

    That of a user's function raises AuditFileError where the function raises, or returns something else than it has to.
    """
    draws = file.draws
    if draws is None:
        return None
    if draws.cells is not None:
        return Constant.of(draws.cells)
    if draws.intervals is not None:
        return Linear.of(draws.intervals)
    if draws.degree is not None:
        return Polynomial.of(draws.degree)
    function = approximation_function(kernel)
    assert function is not None  # find_kernel found it
    return _Own(file.source, draws.approximate, function)


class _Own:
    """A user's function from uniforms to normals, run in plain NumPy on float64 arrays."""

    def __init__(self, source: str, name: str, function: Callable[..., Any]) -> None:
        self._source, self._name, self._function = source, name, function

    def __call__(self, uniforms: Doubles) -> Doubles:
        """Return a new float64 array of the same shape."""
        try:
            with np.errstate(all="ignore"):  # what is not finite is said below
                found = self._function(uniforms.copy())  # it may write into what it gets
        except KeyboardInterrupt:
            raise
        except BaseException as problem:  # whatever the user's function raises is the user's to see
            raise self._error(f"raised {type(problem).__name__}: {said(problem)}") from problem
        if not isinstance(found, np.ndarray) or found.dtype.kind != "f":
            what = f"an array of dtype {found.dtype}" if isinstance(found, np.ndarray) else f"a {type(found).__name__}"
            raise self._error(f"returned {what}")
        if found.shape != uniforms.shape:
            raise self._error(f"returned an array of shape {found.shape} for one of shape {uniforms.shape}")
        finite = np.isfinite(found)
        if not finite.all():
            place = np.unravel_index(int(np.argmin(finite)), found.shape)
            raise self._error(f"returned {float(found[place])!r} for the uniform {float(uniforms[place])!r}")
        return np.array(found, np.float64)

    def check_alone(self, uniforms: Doubles, found: Doubles) -> None:
        """Raise AuditFileError unless some of the uniforms by themselves have the normals that they have among all."""
        few = uniforms.size // _SOME
        apart = np.abs(self(uniforms[:few]) - found[:few])
        if not (apart <= _SAME).all():
            place = int(np.argmax(apart))
            raise self._error(f"makes another normal of the uniform {float(uniforms[place])!r} among other uniforms")

    def check_again(self, uniforms: Doubles, found: Doubles) -> None:
        """Raise AuditFileError unless the same uniforms give the same bits again: it has no memory of its calls."""
        if self(uniforms).tobytes() != found.tobytes():
            raise self._error("does not give the same normals for the same uniforms a second time")

    def _error(self, what: str) -> AuditFileError:
        return AuditFileError(self._source, _KEY, f"{self._name} {what}", _ACCEPTED)


def quality(approximation: Approximation) -> tuple[float, float, float]:
    """Return mean, variance and mean square error of approximate normals: of a user's function from 2^20 midpoints.

    Raises what the map raises, and AuditFileError where a user's function makes a normal of several uniforms.
    """
    if isinstance(approximation, (Constant, Linear, Polynomial)):
        error = approximation.mean_square_error
        return 0.0, 1.0 - error, error
    uniforms = (np.arange(_MIDPOINTS) + 0.5) / _MIDPOINTS
    found = approximation(uniforms)
    if isinstance(approximation, _Own):
        approximation.check_again(uniforms, found)
        approximation.check_alone(uniforms, found)
    mean = float(np.mean(found))
    square = float(np.mean(np.square(found - exact_normals(uniforms))))
    return mean, float(np.mean(np.square(found))) - mean * mean, square

"""From [draws] to the map from uniforms to normals: the built-in kinds, and what a user's function is held to."""

from __future__ import annotations

import textwrap
from pathlib import Path

import numpy as np
import pytest

from narrowgauge.draws.approximate import Approximation, Constant, Linear, Polynomial
from narrowgauge.errors import AuditFileError, KernelError
from narrowgauge.kernel.approximation import approximation_of, quality
from narrowgauge.kernel.auditfile import audit_file_from
from narrowgauge.kernel.loading import find_kernel

KERNEL = "def value(z, h):\n    return z[0]\n"
# A logistic approximation of the normal quantile; any function of each uniform alone would do.
LOGISTIC = "import numpy as np\n\ndef logistic(u):\n    return np.log(u / (1 - u)) / 1.7\n"
ACCEPTED = "a function that returns a finite float64 normal for each uniform in (0, 1), in an array of the same shape"


def map_of(folder: Path, source: str = "", **draws: object) -> Approximation:
    (folder / "kernel.py").write_text(KERNEL, encoding="utf-8")
    (folder / "cheap.py").write_text(textwrap.dedent(source), encoding="utf-8")
    file = audit_file_from(
        {
            "kernel": {"run": f"{folder / 'kernel.py'}:value", "takes": "normals"},
            "ladder": {"horizon": 1.0, "finest": 0},
            "draws": {"approximate": f"{folder / 'cheap.py'}:logistic", **draws},
        }
    )
    found = approximation_of(file, find_kernel(file))
    assert found is not None
    return found


def refusal(folder: Path, source: str) -> str:
    """What is said of the user's function, after the name of the file and the key."""
    with pytest.raises(AuditFileError) as caught:
        quality(map_of(folder, source))
    start = "audit: draws.approximate: "
    assert str(caught.value).startswith(start)
    return str(caught.value).removeprefix(start).replace(f"{folder / 'cheap.py'}", "cheap.py")


@pytest.mark.parametrize(
    ("draws", "like"),
    [
        ({"approximate": "constant", "cells": 64}, Constant.of(64)),
        ({"approximate": "constant"}, Constant.of(1024)),
        ({"approximate": "linear", "intervals": 4}, Linear.of(4)),
        ({"approximate": "linear"}, Linear.of(16)),
        ({"approximate": "polynomial", "degree": 5}, Polynomial.of(5)),
        ({"approximate": "polynomial"}, Polynomial.of(9)),
    ],
)
def test_built_in_kinds_have_the_size_asked_for_or_its_default(
    tmp_path: Path, draws: dict, like: Approximation
) -> None:
    """The same bits, and mean, variance and mean square error in closed form."""
    uniforms = (np.arange(512) + 0.5) / 512
    found = map_of(tmp_path, **draws)
    assert np.array_equal(found(uniforms), like(uniforms))
    error = like.mean_square_error
    assert quality(found) == (0.0, 1.0 - error, error)


def test_a_function_of_the_users_is_run_on_float64(tmp_path: Path) -> None:
    """As a kernel is found: relative to the audit file or by its path, in plain NumPy; its figures are computed."""
    found = map_of(tmp_path, LOGISTIC)
    uniforms = np.array([[0.1, 0.5, 0.9]])
    assert np.array_equal(found(uniforms), np.log(uniforms / (1 - uniforms)) / 1.7)
    mean, variance, error = quality(found)
    # Of the logistic distribution: variance pi^2 / 3. The midpoints leave out part of its tails, 2^20 of them 1e-4.
    assert abs(mean) < 1e-12
    assert variance == pytest.approx(np.pi**2 / 3 / 1.7**2, abs=1e-4)
    assert 0 < error < 0.02


def test_a_function_may_write_into_its_uniforms(tmp_path: Path) -> None:
    """It gets a copy, since other arms see the same uniforms."""
    found = map_of(tmp_path, "def logistic(u):\n    u -= 0.5\n    return u\n")
    uniforms = np.array([0.25])
    assert found(uniforms).tolist() == [-0.25]
    assert uniforms.tolist() == [0.25]


@pytest.mark.parametrize(
    ("body", "message"),
    [
        ("return None", "returned a NoneType"),
        ("return u > 0.5", "returned an array of dtype bool"),
        ("return u[1:]", "returned an array of shape (1048575,) for one of shape (1048576,)"),
        ("return np.where(u < 1e-6, np.nan, u)", "returned nan for the uniform 4.76837158203125e-07"),
        ("return np.log(u - 2**-21)", "returned -inf for the uniform 4.76837158203125e-07"),
        ("return 1 / 0", "raised ZeroDivisionError: division by zero"),
        (
            "return np.argsort(np.argsort(u)) / u.size - 0.5",
            "makes another normal of the uniform 0.1249995231628418 among other uniforms",
        ),
        (
            "SEEN.append(1); return u - 1e-3 * len(SEEN)",
            "does not give the same normals for the same uniforms a second time",
        ),
        ("return u - u.mean(axis=0)", "makes another normal of the uniform 4.76837158203125e-07 among other uniforms"),
    ],
)
def test_what_a_function_does_wrong_is_said(tmp_path: Path, body: str, message: str) -> None:
    """With the function's name and what is accepted."""
    source = f"import numpy as np\nSEEN = []\n\ndef logistic(u):\n    {body}\n"
    assert refusal(tmp_path, source) == f"cheap.py:logistic {message}; accepted: {ACCEPTED}"


def test_what_a_function_raises_is_the_cause(tmp_path: Path) -> None:
    """Its own traceback can be shown."""
    with pytest.raises(AuditFileError) as caught:
        map_of(tmp_path, "def logistic(u):\n    return 1 / 0\n")(np.array([0.5]))
    assert isinstance(caught.value.__cause__, ZeroDivisionError)


def test_a_function_that_is_not_there_is_said_of_its_key(tmp_path: Path) -> None:
    """No file, no function of that name in it, or no Python: the key is draws.approximate, not kernel.run."""
    assert refusal(tmp_path, "def other(u):\n    return u\n") == (
        "cheap.py has no function 'logistic'; accepted: one of other"
    )
    assert refusal(tmp_path, "def logistic(u:\n").startswith("cheap.py:1 is not Python: ")
    with pytest.raises(AuditFileError, match=r"draws\.approximate: no such file: .*gone\.py"):
        map_of(tmp_path, approximate="gone.py:logistic")
    with pytest.raises(KernelError, match="executing the module raised RuntimeError: no"):
        map_of(tmp_path, "raise RuntimeError('no')\n")


def test_the_function_counts_in_the_fingerprint(tmp_path: Path) -> None:
    """A worker, or an audit that is resumed, must find the same one; of built-in kinds nothing is added."""

    def digest(source: str, **draws: object) -> str:
        (tmp_path / "kernel.py").write_text(KERNEL, encoding="utf-8")
        (tmp_path / "cheap.py").write_text(source, encoding="utf-8")
        tables = {"draws": {"approximate": f"{tmp_path / 'cheap.py'}:logistic", **draws}} if draws or source else {}
        kernel = {"run": f"{tmp_path / 'kernel.py'}:value", "takes": "normals"}
        return find_kernel(
            audit_file_from({"kernel": kernel, "ladder": {"horizon": 1.0, "finest": 0}, **tables})
        ).digest()

    plain, own = digest(""), digest(LOGISTIC)
    assert own not in (plain, digest(LOGISTIC.replace("1.7", "1.8")))
    assert digest(LOGISTIC) == own
    assert digest(LOGISTIC, approximate="linear") == plain

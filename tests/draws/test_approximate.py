"""Approximate normals: how far they are from the normal, their symmetry, and that each is the best of its kind."""

import itertools
import math

import numpy as np
import pytest
from scipy import integrate, special

from narrowgauge.draws.approximate import Constant, Linear, Polynomial

# Mean square errors, and root mean square errors, computed from first principles; those of the constant maps agree to 5
# digits with "A nested MLMC framework for efficient simulations on FPGAs", arXiv 2502.07123, fig. 1.
CONSTANT = {2**8: 7.43215e-4, 2**10: 1.496848e-4, 2**12: 3.134450e-5}
LINEAR = {4: 0.0560594, 8: 0.0130218, 16: 0.00645169}
LINEAR_LIMIT = 0.0064288

MAPS = {
    **{f"constant {cells}": Constant.of(cells) for cells in (2, 4, 64, 1024)},
    **{f"linear {intervals}": Linear.of(intervals) for intervals in (1, 2, 5, 16)},
    **{f"polynomial {degree}": Polynomial.of(degree) for degree in (1, 2, 3, 9, 31)},
}
EPS = float(np.finfo(np.float64).eps)
# Odd about 1/2 in pairs, as all uniforms of a block are multiples of 2^-53: 1 - u is exact.
GRID = (np.arange(2**12) + 0.5) / 2**12


def square_error(approximation):
    """The mean square error by adaptive quadrature on the scale of the normal, cell by cell."""

    def integrand(z):
        u = special.ndtr(z)
        return float((approximation(np.array([u]))[0] - z) ** 2 * math.exp(-z * z / 2) / math.sqrt(2 * math.pi))

    ends = [-8.2, *special.ndtri(np.concatenate([2.0 ** -np.arange(17.0, 0.0, -1.0)])).tolist()]
    parts = [integrate.quad(integrand, a, b, limit=400)[0] for a, b in itertools.pairwise(ends)]
    return 2 * sum(parts)


@pytest.mark.parametrize("cells", CONSTANT)
def test_the_error_of_cell_means_is_the_published_one(cells):
    """To four digits, half a unit of the last."""
    error = Constant.of(cells).mean_square_error
    assert error == pytest.approx(CONSTANT[cells], rel=0.5e-4)


@pytest.mark.parametrize("intervals", LINEAR)
def test_the_error_of_dyadic_lines_is_the_one_from_first_principles(intervals):
    """To four digits, half a unit of the last."""
    assert math.sqrt(Linear.of(intervals).mean_square_error) == pytest.approx(LINEAR[intervals], rel=0.5e-4)


def test_more_dyadic_intervals_come_to_a_limit():
    """The innermost intervals are what is left: their error does not go away with further ones."""
    assert math.sqrt(Linear.of(52).mean_square_error) == pytest.approx(LINEAR_LIMIT, rel=0.5e-4)


@pytest.mark.parametrize("degree", [1, 2])
def test_the_best_straight_line_is_the_one_of_the_closed_form(degree):
    """Its slope in 2 u - 1 is 3 / sqrt(pi), its mean square error 1 - 3 / pi: E[Z Phi(Z)] = 1 / (2 sqrt(pi))."""
    line = Polynomial.of(degree)
    assert line.series[1] == pytest.approx(3 / math.sqrt(math.pi), rel=16 * EPS)
    assert line.mean_square_error == pytest.approx(1 - 3 / math.pi, rel=64 * EPS)


@pytest.mark.parametrize("name", ["linear 1", "linear 5", "polynomial 3", "polynomial 9"])
def test_errors_agree_with_quadrature_of_the_map_itself(name):
    """The closed forms describe the map as it is evaluated; the quadrature leaves out 1e-14 of the tail."""
    assert MAPS[name].mean_square_error == pytest.approx(square_error(MAPS[name]), rel=1e-6)


def test_another_map_would_be_noticed():
    """Negative control: one line moved by a thousandth of a standard deviation has another error."""
    good = Linear.of(5)
    bad = Linear(intercepts=good.intercepts + 1e-3, slopes=good.slopes, mean_square_error=good.mean_square_error)
    assert square_error(bad) != pytest.approx(bad.mean_square_error, rel=1e-6)


@pytest.mark.parametrize("name", MAPS)
def test_every_map_is_odd_about_a_half(name):
    """So its draws have mean 0 exactly: each uniform has its mirror image with the same probability."""
    drawn = MAPS[name](GRID)
    assert np.array_equal(drawn, -drawn[::-1])
    assert drawn.dtype == np.float64


@pytest.mark.parametrize("cells", [2, 4, 64])
def test_each_cell_has_the_mean_of_the_normal_in_it(cells):
    """By quadrature of the quantile, cell by cell; the outermost ones reach to 0 and 1."""
    found = Constant.of(cells)((np.arange(cells) + 0.5) / cells)
    for cell, value in enumerate(found):
        mean = cells * integrate.quad(special.ndtri, cell / cells, (cell + 1) / cells, limit=400)[0]
        assert value == pytest.approx(mean, rel=1e-7)


def test_a_cell_holds_its_lower_end_and_not_its_upper():
    """The index is the uniform's first bits."""
    table = Constant.of(8)
    assert table(np.array([0.25, np.nextafter(0.375, 0), 0.375])).tolist() == [table.values[i] for i in (2, 2, 3)]


@pytest.mark.parametrize("name", ["linear 5", "linear 16"])
def test_lines_are_orthogonal_to_what_they_leave(name):
    """Least squares: what is left of the quantile on an interval has mean 0 and no slope."""
    for high in (0.5, 0.25, 2.0**-5):
        low = high / 2 if high > 2.0**-5 or name == "linear 16" else 0.0
        inside = np.nextafter(high, 0)
        for weight in (lambda u: 1.0, lambda u, m=(low + high) / 2: u - m):

            def left(u, weight=weight):
                return (special.ndtri(u) - MAPS[name](np.array([u]))[0]) * weight(u)

            assert abs(integrate.quad(left, low, inside, limit=400)[0]) < 1e-9 * (high - low)


@pytest.mark.parametrize("name", MAPS)
def test_uniforms_of_any_shape_are_left_as_they_are(name):
    """The result is a new array of the same shape."""
    uniforms = GRID[:24].reshape(2, 3, 4).copy()
    drawn = MAPS[name](uniforms)
    assert drawn.shape == (2, 3, 4)
    assert np.array_equal(uniforms.ravel(), GRID[:24])
    assert np.array_equal(drawn.ravel(), MAPS[name](GRID[:24]))


@pytest.mark.parametrize("name", MAPS)
def test_the_ends_of_all_uniforms_have_finite_normals(name):
    """The smallest and the largest uniform of a stream are 2^-53 and 1 - 2^-53."""
    drawn = MAPS[name](np.array([2.0**-53, 1 - 2.0**-53]))
    assert np.isfinite(drawn).all()
    assert drawn[0] < 0 < drawn[1]

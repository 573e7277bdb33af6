"""Integrals on a plane's own triangles: area, linear fields, observed order, regions, gaps."""

import numpy as np
import pytest

from wakeledger.physics.fields.triangle_quadrature import area_weights, delaunay, integrate, triangle_areas

RNG = np.random.default_rng(11)


def cloud(n, *, seed=11):
    """Points in the rectangle |y| <= 1, 0 <= z <= 1 with its corners and points along its edges."""
    rng = np.random.default_rng(seed)
    inner = rng.uniform([-1, 0], [1, 1], (n, 2))
    side = np.linspace(0, 1, round(np.sqrt(n)) + 1)
    edges = [np.column_stack([2 * side - 1, np.full(side.size, z)]) for z in (0.0, 1.0)]
    edges += [np.column_stack([np.full(side.size - 2, y), side[1:-1]]) for y in (-1.0, 1.0)]
    return np.concatenate([inner, *edges]).T


def test_area_and_linear_fields_are_exact():
    y, z = cloud(500)
    triangles = delaunay(y, z)
    assert integrate(np.ones(y.size), y, z, triangles) == pytest.approx(2.0, rel=1e-12)
    # The integral of 3 + 2y - 5z over the rectangle: 2 (3 - 5/2).
    assert integrate(3 + 2 * y - 5 * z, y, z, triangles) == pytest.approx(1.0, rel=1e-11)
    assert integrate(y, y, z, triangles) == pytest.approx(0.0, abs=1e-12)
    assert area_weights(y, z, triangles).sum() == pytest.approx(2.0, rel=1e-12)


def test_the_way_round_and_the_order_of_triangles_play_no_part():
    y, z = cloud(200)
    triangles = delaunay(y, z)
    turned = RNG.permutation(triangles)[:, [1, 0, 2]]
    values = np.exp(y) * z
    assert integrate(values, y, z, turned) == pytest.approx(float(integrate(values, y, z, triangles)), rel=1e-13)
    assert (triangle_areas(y, z, turned) > 0).all()


def test_second_order():
    # The integral of exp(y) z² over the rectangle, on lines that are smoothly stretched.
    truth = (np.e - 1 / np.e) / 3
    error = []
    for n in (17, 33, 65):
        y, z = np.linspace(-1, 1, n), np.linspace(0, 1, n)
        yy, zz = (each.ravel() for each in np.meshgrid(y + 0.2 * np.sin(np.pi * y), z**2))
        number = np.arange(n * n).reshape(n, n)
        corner = number[:-1, :-1], number[:-1, 1:], number[1:, 1:], number[1:, :-1]
        triangles = np.concatenate(
            [np.stack([corner[k] for k in three], axis=-1).reshape(-1, 3) for three in ((0, 1, 2), (0, 2, 3))]
        )
        error.append(abs(float(integrate(np.exp(yy) * zz**2, yy, zz, triangles)) - truth))
    # Second order, and in the limit by the last pair.
    assert np.log2(error[1] / error[2]) == pytest.approx(2.0, abs=0.02)


def test_draws_and_regions():
    y, z = cloud(2000)
    triangles = delaunay(y, z)
    draws = np.stack([np.ones(y.size), y + 2])
    np.testing.assert_allclose(integrate(draws, y, z, triangles), [2.0, 4.0], rtol=1e-12)
    inside = y > 0
    # The rim of a region is blurred by half a triangle, which here is 1/60 of it, to both sides.
    assert integrate(np.ones(y.size), y, z, triangles, inside=inside) == pytest.approx(1.0, rel=0.01)


def test_a_point_without_a_value_is_bridged():
    y, z = cloud(2000)
    triangles = delaunay(y, z)
    values = 2 + y
    values[5] = np.nan
    assert integrate(values, y, z, triangles) == pytest.approx(4.0, rel=1e-3)
    values[:] = np.nan
    assert integrate(values, y, z, triangles) == 0.0


def test_what_cannot_be():
    with pytest.raises(ValueError, match="on one line"):
        delaunay(np.arange(5.0), 2 * np.arange(5.0))
    with pytest.raises(ValueError, match="must hold the 3 points"):
        integrate(np.ones(4), np.arange(3.0), np.array([0.0, 1.0, 0.0]), np.array([[0, 1, 2]]))

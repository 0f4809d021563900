"""Laws of described grounds: closed forms against quadrature, geometry and each other."""

from __future__ import annotations

import math
from itertools import pairwise

import numpy as np
import pytest
from hypothesis import given, settings
from hypothesis import strategies as st
from numpy.testing import assert_allclose
from scipy.integrate import quad

from stillground.errors import ConfigError
from stillground.ground import Blob, Body, Box, Centred, Disc, Ground, Layer

INF = math.inf
ZOO: dict[str, tuple[Body, int]] = {
    "blob 1-D": (Blob(0.7, (0.4,), (1.3,)), 1),
    "blob 2-D": (Blob(-1.1, (0.7, -1.9), (2.3, 0.6)), 2),
    "blob 3-D": (Blob(2.0, (0.7, 0.2, -1.9), (2.3, 1.7, 0.6)), 3),
    "blob without end": (Blob(1.0, (0.0, -1.9), (INF, 0.6)), 2),
    "disc 1-D": (Disc(0.7, (0.4,), (1.3,)), 1),
    "disc 2-D": (Disc(-0.7, (0.7, -1.9), (2.3, 1.1)), 2),
    "disc 3-D": (Disc(1.3, (0.7, 0.2, -1.9), (2.3, 3.7, 1.1)), 3),
    "box 1-D": (Box(0.9, (-1.2,), (2.1,)), 1),
    "box 2-D": (Box(0.9, (-1.2, -4.1), (2.1, -0.7)), 2),
    "box 3-D": (Box(-0.9, (-1.2, -3.3, -4.1), (2.1, 2.9, -0.7)), 3),
    "layer": (Layer(0.4, -3.7, -1.6), 2),
    "layer 1-D": (Layer(0.4, -3.7, -1.6), 1),
    "half-space": (Layer(0.4, -INF, -1.6), 3),
    "dipping layer": (Layer(-0.4, -3.7, -1.6, dip=0.37), 2),
    "dipping layer 3-D": (Layer(-0.4, -3.7, -1.6, dip=-0.37), 3),
}
zoo = pytest.mark.parametrize(("body", "d"), ZOO.values(), ids=ZOO.keys())
laws = settings(derandomize=True, deadline=None, max_examples=60)


def segments(d: int, n: int, seed: int = 20) -> tuple[np.ndarray, np.ndarray]:
    rng = np.random.default_rng(seed)
    return rng.uniform(-6, 6, (n, d)), rng.uniform(-6, 6, (n, d))


def breaks(body: Body, a: np.ndarray, b: np.ndarray) -> list[float]:
    """Where a quadrature along a + t (b - a) must be split: edges, or about a narrow peak."""
    if isinstance(body, Centred):
        u, w = (a - body.centre) / body.radii, (b - a) / np.array(body.radii)
        if isinstance(body, Disc):
            t = [root.real for root in np.roots([w @ w, 2 * u @ w, u @ u - 1]) if root.imag == 0]
        else:
            t = list(-(u @ w) / (w @ w) + np.linspace(-9, 9, 7) / np.sqrt(w @ w))
    elif isinstance(body, Box):
        t = [
            (f - s) / (e - s)
            for s, e, *faces in zip(a, b, body.lower, body.upper, strict=True)
            for f in faces
        ]
    elif isinstance(body, Layer):
        low, high = (p[-1] - (body.dip * p[0] if body.dip else 0) for p in (a, b))
        t = [(f - low) / (high - low) for f in (body.bottom, body.top)]
    else:
        t = []
    return [0.0, *sorted(x for x in t if 0 < x < 1), 1.0]


@zoo
def test_integral_is_the_quadrature_of_the_values(body: Body, d: int) -> None:
    """Source: scipy.integrate.quad (QUADPACK)."""
    starts, ends = segments(d, 40)
    got = body.line_integrals(starts, ends)
    assert np.any(got != 0)
    for a, b, integral in zip(starts, ends, got, strict=True):
        length = np.linalg.norm(b - a)
        pieces = [
            quad(lambda t: body.values((a + t * (b - a))[None])[0], low, high, epsabs=1e-13, epsrel=1e-12)[0]  # noqa: B023
            for low, high in pairwise(breaks(body, a, b))
        ]
        assert abs(integral - length * sum(pieces)) <= 1e-10 * length * abs(body.excess)


@zoo
def test_few_gauss_points_between_cuts_integrate_an_upright(body: Body, d: int) -> None:
    """Against the exact integral: no edge is missed, and nothing is too sharp for 12 points."""
    places = np.random.default_rng(8).uniform(-5, 5, (40, d - 1))
    starts, ends = np.hstack([places, np.full((40, 1), -9.0)]), np.hstack([places, np.full((40, 1), 7.0)])
    nodes, weights = np.polynomial.legendre.leggauss(12)
    cuts = np.sort(np.clip(np.hstack([body.cuts(places), starts[:, -1:], ends[:, -1:]]), -9.0, 7.0), axis=1)
    at = cuts[:, :-1, None] + 0.5 * np.diff(cuts)[:, :, None] * (1 + nodes)
    points = np.concatenate(
        [np.broadcast_to(places[:, None, None], (*at.shape, d - 1)), at[..., None]], axis=-1
    )
    values = body.values(points.reshape(-1, d)).reshape(at.shape)
    found = np.sum(0.5 * np.diff(cuts)[:, :, None] * weights * values, axis=(1, 2))
    assert_allclose(found, body.line_integrals(starts, ends), rtol=0, atol=1e-11 * abs(body.excess))


@pytest.mark.parametrize("half", [1e-6, 0.01, 0.3, 2.0, 40.0])
def test_blob_through_the_centre_gives_the_error_function(half: float) -> None:
    """sigma sqrt(2 pi) erf(a / (sigma sqrt 2)): Abramowitz & Stegun 1964, 7.1.1, from memory."""
    sigma, direction = 1.7, np.array([0.6, 0.8])
    blob = Blob(1.0, (3.0, -5.0), (sigma, sigma))
    ends = np.array([[3.0, -5.0]]) + half * direction
    starts = np.array([[3.0, -5.0]]) - half * direction
    expected = sigma * math.sqrt(2 * math.pi) * math.erf(half / (sigma * math.sqrt(2)))
    # A segment of 1e-6 m between coordinates of 5 m has a length known to 5 eps / 1e-6.
    assert_allclose(blob.line_integrals(starts, ends), expected, rtol=1e-13 + 1e-15 / half)


def test_blob_beside_a_long_line_falls_off_as_the_blob_does() -> None:
    """Projection of a Gaussian: sigma sqrt(2 pi) exp(-p^2 / (2 sigma^2)), common practice, no source."""
    p, sigma = np.array([0.0, 0.5, 3.0, 12.0]), 1.7
    starts, ends = np.column_stack([np.full(4, -90.0), p]), np.column_stack([np.full(4, 90.0), p])
    expected = sigma * math.sqrt(2 * math.pi) * np.exp(-(p**2) / (2 * sigma**2))
    assert_allclose(Blob(1.0, (0.0, 0.0), (sigma, sigma)).line_integrals(starts, ends), expected, rtol=1e-13)


@pytest.mark.parametrize("length", [1e-3, 0.0999, 0.1, 0.1001, 1.0, 30.0])
@pytest.mark.parametrize("near", [-37.0, -8.0, -1.0, -0.05, 0.0, 2.0, 6.0, 12.0, 30.0])
def test_blob_keeps_its_digits_when_far_or_short(near: float, length: float) -> None:
    """Relative, not against the peak. Source: scipy.integrate.quad with a relative tolerance only."""
    got = Blob(1.0, (0.0,), (1.0,)).line_integrals(np.array([[near]]), np.array([[near + length]]))[0]
    peak = min(max(0.0, near), near + length)
    cuts = sorted(
        {
            near,
            near + length,
            *np.clip(peak + np.array([-3, -0.5, -0.1, 0, 0.1, 0.5, 3]), near, near + length),
        }
    )
    # Scaled by the largest value, so that quad's own absolute floor plays no part.
    expected = sum(
        quad(lambda x: math.exp((peak - x) * (peak + x) / 2), low, high, epsabs=0, epsrel=1e-12)[0]
        for low, high in pairwise(cuts)
    )
    assert_allclose(got / math.exp(-(peak**2) / 2), expected, rtol=1e-11)


def test_disc_gives_its_chord() -> None:
    """2 sqrt(r^2 - p^2): the chord of a circle, as in Shepp & Logan 1974."""
    p = np.array([0.0, 0.3, 1.2, 1.9, 2.0, 2.5])
    across, along = np.array([0.6, 0.8]), np.array([-0.8, 0.6])
    feet = np.array([1.0, -4.0]) + p[:, None] * across
    expected = 3.0 * 2 * np.sqrt(np.maximum(4.0 - p**2, 0))
    got = Disc(3.0, (1.0, -4.0), (2.0, 2.0)).line_integrals(feet - 9 * along, feet + 7 * along)
    # At p = r, rounding p by eps makes a chord of about sqrt(eps).
    assert_allclose(got, expected, rtol=1e-13, atol=2e-7)
    assert_allclose(got[:4], expected[:4], rtol=1e-13)


def test_values_by_hand() -> None:
    """Definitions of the bodies, worked by hand."""
    at = np.array([[1.0, -2.0], [1.0, -1.0], [3.5, -2.0], [4.0, -3.0]])
    assert_allclose(
        Blob(2.0, (1.0, -2.0), (2.5, 1.0)).values(at), 2 * np.exp([0, -0.5, -0.5, -0.5 * (1.44 + 1)])
    )
    assert_allclose(Disc(2.0, (1.0, -2.0), (2.6, 0.9)).values(at), [2, 0, 2, 0])
    assert_allclose(Box(2.0, (1.0, -2.0), (3.5, 0.0)).values(at), [2, 2, 0, 0])
    assert_allclose(Layer(2.0, -2.5, -1.0).values(at), [2, 0, 2, 0])
    assert_allclose(Layer(2.0, -7.1, -4.9, dip=1.0).values(at), [0, 0, 2, 2])


@zoo
def test_exchanging_the_ends_changes_nothing(body: Body, d: int) -> None:
    starts, ends = segments(d, 200)
    there, back = body.line_integrals(starts, ends), body.line_integrals(ends, starts)
    assert_allclose(there, back, rtol=0, atol=1e-13)


@zoo
@laws
@given(data=st.data())
def test_integral_of_a_split_segment_is_the_sum(body: Body, d: int, data: st.DataObject) -> None:
    coordinate = st.floats(-6, 6, allow_subnormal=False)
    point = st.lists(coordinate, min_size=d, max_size=d)
    start, end = np.array([data.draw(point)]), np.array([data.draw(point)])
    middle = start + data.draw(st.floats(0, 1)) * (end - start)
    whole = body.line_integrals(start, end)
    parts = body.line_integrals(start, middle) + body.line_integrals(middle, end)
    # Rounding the point of a grazing ray by eps moves a disc's chord by about sqrt(eps).
    assert_allclose(parts, whole, rtol=0, atol=1e-6 if isinstance(body, Disc) else 1e-12)


@zoo
def test_values_are_the_derivative_of_the_integrals(body: Body, d: int) -> None:
    """A segment of length 2e-5 about a point has its value as mean, to second order in the length."""
    points, directions = segments(d, 100, seed=7)
    directions *= 1e-5 / np.linalg.norm(directions, axis=1)[:, None]
    mean = body.line_integrals(points - directions, points + directions) / 2e-5
    assert_allclose(mean, body.values(points), rtol=1e-9, atol=1e-10)


@zoo
def test_a_segment_of_no_length_gives_zero(body: Body, d: int) -> None:
    points = segments(d, 50)[0]
    assert np.any(body.values(points) != 0)
    assert np.all(body.line_integrals(points, points) == 0)
    assert np.all(Ground(3.0, (body,)).line_integrals(points, points) == 0)


def test_segments_parallel_to_a_face_are_inside_or_outside() -> None:
    """By hand: upright and level segments against a box and a layer, on a face too."""
    starts = np.array([[0.0, -9.0], [2.0, -9.0], [1.0, -9.0], [-9.0, -1.0], [-9.0, -2.0], [-9.0, -3.5]])
    ends = np.array([[0.0, 9.0], [2.0, 9.0], [1.0, 9.0], [9.0, -1.0], [9.0, -2.0], [9.0, -3.5]])
    box, layer = Box(1.0, (0.0, -3.0), (2.0, -1.0)), Layer(1.0, -3.0, -1.0)
    assert_allclose(box.line_integrals(starts, ends), [2, 0, 2, 0, 2, 0])
    assert_allclose(layer.line_integrals(starts, ends), [2, 2, 2, 0, 18, 0])


def test_bodies_that_touch_leave_no_gap_and_no_overlap() -> None:
    """Half-open bodies side by side are one body, for rays along the shared face too."""
    starts, ends = segments(2, 50)
    starts[0], ends[0] = (-5, -2), (5, -2)
    starts[1], ends[1] = (1, -5), (1, 5)
    boxes = Ground(0.0, (Box(1.0, (-4, -3), (1, -1)), Box(1.0, (1, -3), (4, -1))))
    layers = Ground(0.0, (Layer(1.0, -3, -2), Layer(1.0, -2, -1)))
    assert_allclose(
        boxes.line_integrals(starts, ends), Box(1.0, (-4, -3), (4, -1)).line_integrals(starts, ends)
    )
    assert_allclose(layers.line_integrals(starts, ends), Layer(1.0, -3, -1).line_integrals(starts, ends))
    assert_allclose(boxes.values(starts), Box(1.0, (-4, -3), (4, -1)).values(starts))


def test_bodies_without_end_are_layers() -> None:
    starts, ends = segments(2, 50)
    layer = Layer(1.0, -3.0, -1.0).line_integrals(starts, ends)
    assert_allclose(Disc(1.0, (0.0, -2.0), (INF, 1.0)).line_integrals(starts, ends), layer, atol=1e-14)
    assert_allclose(Box(1.0, (-INF, -3.0), (INF, -1.0)).line_integrals(starts, ends), layer, atol=1e-14)


def test_a_dipping_layer_is_a_level_layer_turned() -> None:
    """Turned by atan(dip), a layer of vertical thickness h is h cos(atan(dip)) thick."""
    angle = math.atan(0.37)
    c, s = math.cos(angle), math.sin(angle)
    starts, ends = segments(2, 50)
    turn = np.array([[c, s], [-s, c]])  # row vectors: level coordinates to dipping ones
    level = Layer(1.0, -3.7 * c, -1.6 * c).line_integrals(starts, ends)
    assert_allclose(
        Layer(1.0, -3.7, -1.6, dip=0.37).line_integrals(starts @ turn, ends @ turn), level, atol=1e-13
    )


def test_a_ground_adds_its_background_and_bodies() -> None:
    bodies = tuple(body for body, d in ZOO.values() if d == 2)
    ground = Ground(5.0, bodies)
    starts, ends = segments(2, 30)
    lengths = np.hypot(*(ends - starts).T)
    assert_allclose(ground.values(starts), 5.0 + np.sum([b.values(starts) for b in bodies], axis=0))
    expected = 5.0 * lengths + np.sum([b.line_integrals(starts, ends) for b in bodies], axis=0)
    assert_allclose(ground.line_integrals(starts, ends), expected)
    assert_allclose(Ground(5.0).line_integrals(starts, ends), 5.0 * lengths)


@pytest.mark.parametrize(
    ("build", "words"),
    [
        (lambda: Blob(1.0, (0.0, 0.0), (1.0, 0.0)), r"blob needs positive radii; got \(1.0, 0.0\)"),
        (lambda: Disc(1.0, (0.0, 0.0), (1.0, math.nan)), "disc needs positive radii"),
        (lambda: Disc(1.0, (0.0, 0.0), (1.0,)), "disc needs as many radii as centre coordinates"),
        (lambda: Blob(1.0, (0.0, INF), (1.0, 1.0)), "blob needs a finite centre"),
        (lambda: Box(1.0, (0.0, 2.0), (1.0, 2.0)), "box needs lower below upper"),
        (lambda: Box(1.0, (0.0,), (1.0, 2.0)), "box needs lower and upper of equal length"),
        (lambda: Layer(1.0, -1.0, -2.0), "layer needs bottom below top; got -1.0 and -2.0"),
        (lambda: Layer(1.0, -2.0, -1.0, dip=INF), "layer needs a finite dip"),
        (lambda: Ground(math.nan), "ground needs a finite background"),
    ],
)
def test_an_impossible_description_is_refused(build: object, words: str) -> None:
    with pytest.raises(ConfigError, match=words):
        build()  # type: ignore[operator]


@pytest.mark.parametrize(
    "body", [Blob(1.0, (0.0,), (1.0,)), Disc(1.0, (0.0,) * 3, (1.0,) * 3), Box(1.0, (0.0,), (1.0,))], ids=repr
)
def test_a_body_of_other_dimensions_than_the_points_is_refused(body: Body) -> None:
    starts, ends = segments(2, 3)
    with pytest.raises(ConfigError, match=r"needs 2 coordinates, as the section; got [13]"):
        body.values(starts)
    with pytest.raises(ConfigError, match=r"needs 2 coordinates, as the section; got [13]"):
        body.line_integrals(starts, ends)


def test_a_dip_in_one_dimension_is_refused() -> None:
    with pytest.raises(ConfigError, match=r"layer needs no dip in one dimension; got 0\.1"):
        Layer(1.0, -2.0, -1.0, dip=0.1).values(np.zeros((3, 1)))

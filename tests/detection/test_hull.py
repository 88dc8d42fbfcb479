"""The ice-free hull and its p-value, against a second way to the same numbers and against simulation."""

import numpy as np
import pytest
from hypothesis import assume, example, given, settings
from hypothesis import strategies as st
from scipy.stats import norm

from bandratio.detection.hull import (
    HullsByIncidence,
    bin_angles,
    convex_hull,
    hulls_by_incidence,
    materials_as_albedo,
    mixture_hull,
    ratio_half_plane,
)
from bandratio.detection.outside import Points, fan_p_value, hull_p_values, outer_p_values
from bandratio.mixing import reflectance_from_albedo

#: Soil 62231 (Pieters 1999, RELAB) and ilmenite HS231.3B (USGS splib07a) at 640 and 1535 nm.
SOIL, ILMENITE = (0.15981, 0.26907), (0.0553, 0.0599)
GROUND = materials_as_albedo([SOIL, ILMENITE])


def one(hull):
    return HullsByIncidence((hull,), by_incidence=False)


def by_hand(hull, a, b, var_a, var_b, covariance, rel_a=0.0, rel_b=0.0):
    """d, Ψ and p of one point, edge by edge, with the whitening done by a Cholesky factor."""
    facing = [(m, c) for m, c in zip(hull.normals, hull.offsets, strict=True) if m[0] > 0 and m[1] < 0]
    null_b = max((m[0] * a + c) / -m[1] for m, c in facing)
    null_b = max(b, null_b)
    sigma = np.array([[var_a + (rel_a * a) ** 2, covariance], [covariance, var_b + (rel_b * null_b) ** 2]])
    factor = np.linalg.cholesky(sigma)
    d = max((m @ [a, b] + c) / np.linalg.norm(factor.T @ m) for m, c in facing)
    angles = np.unwrap([np.arctan2(*(factor.T @ m)[::-1]) for m, _ in facing])
    fan = angles.max() - angles.min()
    return d, fan, norm.sf(d) + fan / (2 * np.pi) * np.exp(-(d**2) / 2) if d > 0 else 1.0


def test_the_loop_agrees_with_the_same_done_edge_by_edge():
    rng = np.random.default_rng(4)
    hull = mixture_hull(GROUND)
    a, b = rng.uniform(-0.02, 0.5, 400), rng.uniform(-0.05, 0.5, 400)
    s_a, s_b = rng.uniform(0.0005, 0.02, (2, 400))
    covariance = rng.uniform(-0.9, 0.9, 400) * s_a * s_b
    points = Points.of(a, b, s_a, s_b, covariance=covariance, relative_red=0.03, relative_infrared=0.2)
    outside, p = hull_p_values(one(hull), points)
    assert (outside > 0).sum() > 200
    for i in range(400):
        d, _, wanted = by_hand(hull, a[i], b[i], s_a[i] ** 2, s_b[i] ** 2, covariance[i], 0.03, 0.2)
        assert outside[i] == pytest.approx(max(d, 0), rel=1e-9, abs=1e-12)
        assert p[i] == pytest.approx(wanted, rel=1e-8, abs=1e-300)


@pytest.mark.parametrize("fan", [0.0, 0.2, 1.0, 2.5, np.pi])
def test_the_fan_formula_is_the_probability_that_it_claims(fan):
    # independent simulation: the greatest projection of a standard normal vector over directions of the fan
    rng = np.random.default_rng(7)
    x = rng.standard_normal((2, 4_000_000))
    angle = np.arctan2(x[1], x[0])
    beyond = np.maximum(np.abs(angle) - fan / 2, 0)  # the nearest direction of the fan
    greatest = np.hypot(*x) * np.cos(beyond)
    for d in (1.0, 2.0, 3.0):
        share, wanted = np.mean(greatest > d), float(fan_p_value(d, fan))
        assert share == pytest.approx(wanted, abs=4 * np.sqrt(wanted / x.shape[1]))


def test_the_whole_circle_has_the_distribution_of_the_length():
    # |x| of a standard normal vector in the plane is Rayleigh: P(|x| > d) = exp(−d²/2)
    assert fan_p_value([1.5, 3.0], 2 * np.pi) == pytest.approx(np.exp([-1.125, -4.5]))
    with pytest.raises(ValueError, match="between 0 and 2π radian, got 7"):
        fan_p_value(1, 7)


def shares_below(p, levels=(0.05, 0.01, 0.001)):
    return {level: np.mean(p <= level) for level in levels}


@pytest.mark.parametrize(
    ("sigma_red", "sigma_infrared"), [(0.02, 0.001), (0.001, 0.02), (0.004, 0.004), (0.0005, 0.01)]
)
@pytest.mark.parametrize("correlation", [0.0, 0.9, -0.9])
def test_p_is_valid_on_edges_at_corners_and_inside(sigma_red, sigma_infrared, correlation):
    rng = np.random.default_rng(11)
    hull = mixture_hull(GROUND)
    corner = np.array([[0, 0], SOIL, ILMENITE])
    edge = reflectance_from_albedo(
        np.array([0.2, 0.5, 0.8])[:, None] * GROUND[0] + np.array([0.8, 0.5, 0.2])[:, None] * GROUND[1]
    )
    inside = corner.mean(axis=0)[None]
    chol = np.linalg.cholesky(
        [[sigma_red**2, correlation * sigma_red * sigma_infrared], [correlation * sigma_red * sigma_infrared, sigma_infrared**2]]
    )  # fmt: skip
    n = 100_000
    for truth in np.vstack([corner, edge, inside]):
        measured = truth + rng.standard_normal((n, 2)) @ chol.T
        points = Points.of(
            *measured.T, sigma_red, sigma_infrared, covariance=correlation * sigma_red * sigma_infrared
        )
        _, p = hull_p_values(one(hull), points)
        for level, share in shares_below(p).items():
            assert share < level + 4 * np.sqrt(level / n), (truth, level)


@pytest.mark.parametrize("relative_infrared", [0.03, 0.1, 0.2])
def test_p_is_valid_where_errors_scale_with_the_albedo(relative_infrared):
    # taken at the measured value, 10 % noise in the infrared would give 86 times the false alarms at 1e-5
    rng = np.random.default_rng(12)
    n = 400_000
    share = rng.uniform(0, 1, (n, 1))
    truth = reflectance_from_albedo(share * GROUND[0] + (1 - share) * GROUND[1])
    measured = truth * (1 + [0.03, relative_infrared] * rng.standard_normal((n, 2)))
    points = Points.of(*measured.T, 0, 0, relative_red=0.03, relative_infrared=relative_infrared)
    _, p = hull_p_values(one(mixture_hull(GROUND)), points)
    for level, found in shares_below(p, (0.05, 0.01, 0.001, 1e-4)).items():
        assert found < level + 4 * np.sqrt(level / n)
    # the same points with the error of the measured value: the statement has power
    naive = Points.of(*measured.T, 0.03 * np.abs(measured[:, 0]), relative_infrared * np.abs(measured[:, 1]))
    _, p = hull_p_values(one(mixture_hull(GROUND)), naive)
    if relative_infrared > 0.05:
        assert np.mean(p <= 1e-4) > 1e-3


@pytest.mark.parametrize("incidence", [0, 14.2, 30, 45, 58.7, 60])
def test_p_is_valid_at_every_incidence_and_a_laboratory_hull_is_not(incidence):
    rng = np.random.default_rng(13)
    n = 100_000
    share = rng.uniform(0, 1, (n, 1))
    truth = reflectance_from_albedo(share * GROUND[0] + (1 - share) * GROUND[1], incidence, incidence)
    measured = truth + 0.001 * rng.standard_normal((n, 2))
    hulls = hulls_by_incidence(GROUND, by_incidence=True)
    for angle in (incidence, np.nan):  # known, and unknown
        _, p = hull_p_values(hulls, Points.of(*measured.T, 0.001, 0.001, incidence_deg=angle))
        for level, found in shares_below(p).items():
            assert found < level + 4 * np.sqrt(level / n)
    if incidence == 60:
        _, p = hull_p_values(one(mixture_hull(GROUND)), Points.of(*measured.T, 0.001, 0.001))
        assert np.mean(p <= 0.001) > 0.1


def test_each_bin_covers_what_is_seen_within_it():
    hulls = hulls_by_incidence(GROUND, by_incidence=True)
    share = np.linspace(0, 1, 101)[:, None]
    for angles, hull in zip(bin_angles(), hulls.hulls, strict=True):
        for angle in np.linspace(angles[0], angles[-1] - 1e-6, 7):
            seen = reflectance_from_albedo(share * GROUND[0] + (1 - share) * GROUND[1], angle, angle)
            assert hull.excess(seen).max() < 1e-5  # a hundredth of a good lidar's error
            assert hulls.hulls[hulls.bins(np.array([angle]))[0]] is hull or len(angles) > 3


def test_sixty_four_intervals_leave_a_thousandth_of_a_sigma():
    share = np.linspace(0, 1, 5001)[:, None]
    curve = reflectance_from_albedo(share * GROUND[0] + (1 - share) * GROUND[1])
    assert mixture_hull(GROUND).excess(curve).max() < 1e-5  # at an error of 0.005 that is 0.002 sigma
    assert mixture_hull(GROUND, intimate=False).excess(curve).max() == pytest.approx(0.007, abs=0.001)


def test_pairs_suffice_for_mixtures_of_more_materials():
    rng = np.random.default_rng(3)
    materials = materials_as_albedo(rng.uniform(0.03, 0.9, (5, 2)))
    weights = rng.dirichlet(np.full(5, 0.5), 100_000)
    many = reflectance_from_albedo(weights @ materials)
    assert mixture_hull(materials).excess(many).max() < 2e-4


@given(
    st.lists(st.tuples(st.floats(0.02, 0.9), st.floats(0.02, 0.9)), min_size=1, max_size=4),
    st.tuples(st.floats(0.02, 0.9), st.floats(0.02, 0.9)),
)
@settings(max_examples=40)
def test_what_is_inside_stays_inside_when_a_material_is_added(materials, added):
    few = mixture_hull(materials_as_albedo(materials), intervals=16)
    more = mixture_hull(materials_as_albedo([*materials, added]), intervals=16)
    assert more.contains(few.vertices, 1e-8).all()


POINT = st.tuples(st.floats(0, 1), st.floats(0, 1))
SIGMA = st.floats(0.001, 0.1)


@given(POINT, SIGMA, SIGMA, st.floats(-0.95, 0.95))
def test_p_never_falls_below_that_of_one_direction(point, s_a, s_b, correlation):
    points = Points.of(*point, s_a, s_b, covariance=correlation * s_a * s_b)
    outside, p = hull_p_values(one(mixture_hull(GROUND)), points)
    assert p[0] >= norm.sf(outside[0]) * (1 - 1e-12)
    assert p[0] < 1 or outside[0] == 0


@given(POINT, SIGMA, SIGMA, st.floats(0.3, 1.8), st.floats(0.01, 100))
def test_with_a_lone_ratio_scaling_both_channels_changes_nothing(point, s_a, s_b, ratio, scale):
    hulls = one(ratio_half_plane(ratio))
    once, p = hull_p_values(hulls, Points.of(*point, s_a, s_b))
    again, p_again = hull_p_values(
        hulls, Points.of(scale * point[0], scale * point[1], scale * s_a, scale * s_b)
    )
    assert again == pytest.approx(once, rel=1e-9, abs=1e-9)
    if once[0] > 1e-6:  # on the very edge p steps from 1 to one half
        assert p_again == pytest.approx(p, rel=1e-5, abs=1e-9)


@given(POINT, SIGMA, SIGMA, st.tuples(st.floats(0.02, 0.9), st.floats(0.02, 0.9)), st.floats(0.05, 20))
def test_with_one_material_scaling_both_channels_changes_nothing(point, s_a, s_b, material, scale):
    hulls = one(mixture_hull(materials_as_albedo([material])))
    once, p = hull_p_values(hulls, Points.of(*point, s_a, s_b))
    again, p_again = hull_p_values(
        hulls, Points.of(scale * point[0], scale * point[1], scale * s_a, scale * s_b)
    )
    assert again == pytest.approx(once, rel=1e-6, abs=1e-6)
    if once[0] > 1e-5:
        assert p_again == pytest.approx(p, rel=1e-4, abs=1e-9)
    # and it is the plain ratio test
    ratio, _ = hull_p_values(one(ratio_half_plane(material[0] / material[1])), Points.of(*point, s_a, s_b))
    assert ratio == pytest.approx(once, rel=1e-5, abs=1e-5)


@given(st.floats(0.01, 1), SIGMA, SIGMA, st.floats(0, 0.5), st.floats(0, 0.5), st.floats(0, 0.3))
def test_a_dropouts_p_never_falls_when_the_limit_rises(red, s_a, s_b, low, high, relative):
    assume(low < high)
    hulls = one(mixture_hull(GROUND))
    p = [
        hull_p_values(
            hulls,
            Points.of(
                red, np.nan, s_a, s_b, relative_red=0.03, relative_infrared=relative, infrared_limit=limit
            ),
        )[1][0]
        for limit in (low, high)
    ]
    assert p[1] >= p[0] * (1 - 1e-12)


def test_the_outer_p_value_is_that_of_the_nearest_point():
    # a square seen by equal errors: outside an edge d is the distance to it; inside p is 1
    hull = convex_hull([[0, 0], [0.4, 0], [0.4, 0.4], [0, 0.4]])
    points = Points.of([0.5, 0.2, -0.1, 0.2], [0.2, 0.2, 0.2, 0.52], 0.05, 0.05)
    assert outer_p_values(one(hull), points) == pytest.approx(np.exp([-2, 0, -2, -0.5 * 2.4**2]))


def test_a_dropout_is_outside_only_if_it_is_so_at_every_infrared_albedo():
    hull = convex_hull([[0, 0.1], [0.4, 0.1], [0.4, 0.4], [0, 0.4]])
    inside_below = Points.of(0.2, np.nan, 0.01, 0.01, infrared_limit=0.5)
    assert outer_p_values(one(hull), inside_below)[0] == pytest.approx(1)
    measured = Points.of(0.2, 0.5, 0.01, 0.01)
    assert outer_p_values(one(hull), measured)[0] < 1e-10
    outside = Points.of(0.2, np.nan, 0.01, 0.01, infrared_limit=0.05)
    assert outer_p_values(one(hull), outside)[0] == pytest.approx(np.exp(-0.5 * 5**2), rel=1e-6)


def test_the_outer_loop_agrees_with_the_same_done_edge_by_edge():
    rng = np.random.default_rng(6)
    hull = mixture_hull(materials_as_albedo([SOIL, ILMENITE, (0.58, 0.0065), (0.6, 0.5)]))
    a, b = rng.uniform(-0.1, 0.9, 300), rng.uniform(-0.1, 0.9, 300)
    s_a, s_b = rng.uniform(0.005, 0.05, (2, 300))
    covariance = rng.uniform(-0.9, 0.9, 300) * s_a * s_b
    p = outer_p_values(one(hull), Points.of(a, b, s_a, s_b, covariance=covariance))
    assert 50 < (p < 1).sum() < 290
    for i in range(300):
        sigma = np.array([[s_a[i] ** 2, covariance[i]], [covariance[i], s_b[i] ** 2]])
        spread = np.sqrt(np.einsum("ej,jk,ek->e", hull.normals, sigma, hull.normals))
        d = max(((hull.normals @ [a[i], b[i]] + hull.offsets) / spread).max(), 0)
        assert p[i] == pytest.approx(np.exp(-(d**2) / 2), rel=1e-6, abs=1e-300)


@pytest.mark.parametrize(("relative_red", "relative_infrared"), [(0.03, 0.03), (0.03, 0.2), (0.2, 0.2)])
def test_listed_ground_and_ice_are_seldom_called_unexplained(relative_red, relative_infrared):
    rng = np.random.default_rng(14)
    ice = materials_as_albedo([(0.58, 0.0065), (0.82, 0.009)])
    hull = mixture_hull(np.vstack([GROUND, ice]))
    n = 200_000
    share, fraction = rng.uniform(0, 1, (2, n, 1))
    fraction[rng.random(n) < 0.3] = 0  # bare ground
    fraction[rng.random(n) < 0.3] = 1  # pure ice
    bare = reflectance_from_albedo(share * GROUND[0] + (1 - share) * GROUND[1])
    truth = (1 - fraction) * bare + fraction * reflectance_from_albedo(ice[rng.integers(0, 2, n)])
    measured = truth * (1 + [relative_red, relative_infrared] * rng.standard_normal((n, 2)))
    measured += 0.001 * rng.standard_normal((n, 2))
    points = Points.of(
        *measured.T, 0.001, 0.001, relative_red=relative_red, relative_infrared=relative_infrared
    )
    for level, found in shares_below(outer_p_values(one(hull), points)).items():
        assert found < level + 4 * np.sqrt(level / n)


def test_errors_common_to_both_albedos_are_taken():
    # one range error moves both: a covariance that only the relative parts allow
    common = 0.05
    points = Points.of(
        0.3,
        0.2,
        0.001,
        0.001,
        covariance=common**2 * 0.3 * 0.2,
        relative_red=common,
        relative_infrared=common,
    )
    outside, _ = hull_p_values(one(mixture_hull(GROUND)), points)
    apart, _ = hull_p_values(
        one(mixture_hull(GROUND)),
        Points.of(0.3, 0.2, 0.001, 0.001, relative_red=common, relative_infrared=common),
    )
    assert outside[0] > apart[0]  # it leaves the ratio alone, and the ratio is what is outside


@given(st.lists(st.tuples(st.floats(-1, 1), st.floats(-1, 1)), min_size=2, max_size=40))
@example([(0.0, 1.0), (-5e-324, 0.0)])  # smaller than any albedo, its slope would overflow
def test_any_points_have_a_hull_that_holds_them(points):
    assume(np.ptp(np.array(points), axis=0).max() > 1e-8)  # nearer ones are one point, which has no hull
    hull = convex_hull(points)
    assert hull.excess(points).max() < 1e-6
    assert (hull.slopes > 0).all()
    lower, upper = hull.chains()
    assert (np.diff(lower[:, 0]) >= 0).all()
    assert (np.diff(upper[:, 0]) >= 0).all()


@given(st.lists(st.tuples(st.floats(0, 1), st.floats(0, 1)), min_size=3, max_size=60))
def test_fewer_edges_still_bound_the_whole_hull_and_little_more(points):
    assume(np.ptp(np.array(points), axis=0).max() > 1e-8)  # nearer ones are one point, which has no hull
    hull = convex_hull(points)
    kept = hull.bounding_edges()
    assert len(kept) <= len(hull.offsets)
    excess = hull.excess(np.random.default_rng(0).uniform(-0.2, 1.2, (300, 2)))
    nearly = (excess[:, kept] <= 0).all(axis=1)
    assert (excess[nearly].max(axis=1) < 1e-3).all()


@pytest.mark.parametrize(
    "materials",
    [[SOIL], [SOIL, SOIL], [SOIL, (0.15981 / 2, 0.26907 / 2)], [SOIL, (0.15981 + 1e-12, 0.26907)]],
    ids=["one", "duplicates", "nearly collinear with the origin", "one twice but for rounding"],
)
def test_degenerate_grounds_work(materials):
    hulls = one(mixture_hull(materials_as_albedo(materials)))
    outside, p = hull_p_values(hulls, Points.of([0.16, 0.5, 0.0], [0.2694, 0.1, 0.0], 0.005, 0.005))
    assert outside[0] < 1
    assert outside[1] > 20
    assert p[2] > 0.49


def test_no_errors_at_all_is_the_plain_comparison():
    outside, p = hull_p_values(one(mixture_hull(GROUND)), Points.of([0.12, 0.1], [0.1, 0.16], 0, 0))
    assert outside.tolist() == [np.inf, 0.0]
    assert p.tolist() == [0.0, 1.0]


def test_missing_values_stay_missing():
    outside, p = hull_p_values(
        one(mixture_hull(GROUND)),
        Points.of([np.nan, 0.1, 0.1], [0.1, np.nan, 0.1], 0.01, [0.01, 0.01, np.nan]),
    )
    assert np.isnan(outside).all()
    assert np.isnan(p).all()
    assert np.isnan(outer_p_values(one(mixture_hull(GROUND)), Points.of(np.nan, 0.1, 0.01, 0.01))).all()


@pytest.mark.parametrize(
    ("call", "message"),
    [
        (lambda: convex_hull([[0, 0, 0]]), r"must have shape \(point, 2\), got \(1, 3\)"),
        (lambda: convex_hull([[0, np.nan]]), "must be finite"),
        (lambda: convex_hull([[0.1, 0.1], [0.1, 0.1]]), "at least two different points"),
        (lambda: mixture_hull([[0.1, 0.2, 0.3]]), r"shape \(material, 2\)"),
        (lambda: mixture_hull([[0.1, 1.2]]), "above 0 and at most 1"),
        (lambda: mixture_hull(GROUND, intervals=0), "intervals must be 1 or more"),
        (lambda: ratio_half_plane(-1), "ice_free_ratio must be above zero"),
        (lambda: Points.of(0.1, 0.1, -0.01, 0.01), "sigma_red must be zero or above, got -0.01"),
        (lambda: Points.of(0.1, 0.1, 0.01, 0.01, relative_infrared=np.inf), "relative_infrared must be finite"),
        (lambda: Points.of(0.1, 0.1, 0.01, 0.01, covariance=1), "covariance must not exceed"),
        (lambda: Points.of(0.1, 0.1, 0.01, 0.01, infrared_limit=-0.1), "infrared_limit must be zero or above"),
        (lambda: hulls_by_incidence(GROUND, by_incidence=True).bins(np.array([85.0])), "between 0 and 80 degrees, got 85"),
    ],
)  # fmt: skip
def test_bad_input_is_named(call, message):
    with pytest.raises(ValueError, match=message):
        call()

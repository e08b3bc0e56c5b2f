"""Derived figures of laws that are known: against closed forms and mpmath, family by family."""

from __future__ import annotations

import math

import mpmath
import numpy as np
import pytest

from kernelfit import kernels
from kernelfit.errors import Unavailable
from kernelfit.inference.derived import Lost, Setting, derived_figures
from kernelfit.kernels import KERNELS, DistanceRange

REFERENCE, NEAR, FAR = 80.0, 60.0, 900.0
AMPLITUDE, LENGTH = 0.2, 150.0
EXACT = 1e-9  # relative: closed forms, less what root finding and quadrature leave


def law_of(kernel, natural, *, m=2, near=NEAR, far=FAR, reference=REFERENCE):
    """A kernel with these natural parameters on an array with pairs from `near` to `far`, m coordinates."""
    span = DistanceRange(reference, near, far, m)
    setting = Setting(kernel, span, near, far, 400.0, len(natural), 40.0, True, Unavailable("no pairs here"))
    return setting.at(kernel.working(np.array(natural), span))


def figure(law, name):
    """The value of one figure, or the reason why there is none."""
    (found,) = [f for f in derived_figures(law) if f.name == name]
    return found.value(law)


def lost(law, name):
    got = figure(law, name)
    assert isinstance(got, Lost), got
    (found,) = [f for f in derived_figures(law) if f.name == name]
    assert found.lost(law) == got
    return got


def gaussian(m=2, **options):
    return law_of(kernels.Gaussian(), [AMPLITUDE, LENGTH], m=m, **options)


def exponential(m=2, **options):
    return law_of(kernels.Exponential(), [AMPLITUDE, LENGTH], m=m, **options)


def difference(m=2, narrow=0.5, narrow_length=110.0, wide=0.25, wide_length=260.0, **options):
    natural = [narrow, narrow_length, wide, wide_length]
    return law_of(kernels.DifferenceOfGaussians(), natural, m=m, **options)


def hat(m=2, amplitude=AMPLITUDE, **options):
    return law_of(kernels.MexicanHat(), [amplitude, LENGTH], m=m, **options)


# --- reach and half-distance --------------------------------------------------------------------------------

# J(d)/J(r) = share solved for d by hand, for each family's formula (docs/model.md section 5).
FALLS = [
    (exponential(), lambda share: REFERENCE - LENGTH * math.log(share)),
    (gaussian(), lambda share: math.sqrt(REFERENCE**2 - 2 * LENGTH**2 * math.log(share))),
    (
        law_of(kernels.PowerLaw(), [AMPLITUDE, 2.5]),
        lambda share: 2 * REFERENCE * share ** (-1 / 2.5) - REFERENCE,
    ),
    (
        law_of(kernels.PowerLaw(fit_scale=True), [-AMPLITUDE, 200.0, 4.0]),
        lambda share: (200.0 + REFERENCE) * share ** (-1 / 4.0) - 200.0,
    ),
]


@pytest.mark.parametrize(("law", "solved"), FALLS, ids=lambda v: getattr(getattr(v, "setting", None), "kernel", ""))
def test_reach_and_half_distance_of_families_that_fall(law, solved):
    assert figure(law, "reach_um") == pytest.approx(solved(math.exp(-1)), rel=EXACT)
    assert figure(law, "half_distance_um") == pytest.approx(solved(0.5), rel=EXACT)


def test_reach_of_a_disc_is_its_radius():
    law = law_of(kernels.Disc(), [AMPLITUDE, 230.0])
    assert figure(law, "reach_um") == figure(law, "half_distance_um") == pytest.approx(230.0, rel=EXACT)


def test_reach_of_a_spline_is_where_it_falls_first():
    """Coefficients in a straight line make a straight line; it falls to half half way to its zero."""
    kernel = kernels.Spline(n_basis=8)
    span = DistanceRange(REFERENCE, NEAR, FAR, 2)
    knot_means = NEAR + (FAR - NEAR) / 5 * (np.arange(8) - 1)  # of each basis function's knots
    law = law_of(kernel, 1e-3 * (700.0 - knot_means))
    np.testing.assert_allclose(law(np.array([100.0, 500.0])), [0.6, 0.2], rtol=1e-12)
    assert span.largest_um == FAR
    assert figure(law, "half_distance_um") == pytest.approx(REFERENCE + 0.5 * (700 - REFERENCE), rel=EXACT)
    assert figure(law, "sign_change_um") == pytest.approx(700.0, rel=EXACT)


NO_REACH = [
    (law_of(kernels.Flat(), [AMPLITUDE]), "does not fall to 1/e"),
    (law_of(kernels.Exponential(), [AMPLITUDE, 2000.0]), "largest distance with pairs (900 µm)"),
    (law_of(kernels.Exponential(), [0.0, LENGTH]), "J is zero at the reference distance"),
    (gaussian(reference=40.0), "no pairs at the reference distance"),
    (gaussian(reference=1000.0), "no pairs at the reference distance"),
]


@pytest.mark.parametrize(("law", "why"), NO_REACH)
def test_where_there_is_no_reach_the_reason_is_said(law, why):
    assert why in lost(law, "reach_um").reason


def test_a_fall_beyond_the_array_is_lost_above():
    assert lost(law_of(kernels.Exponential(), [AMPLITUDE, 2000.0]), "reach_um").side == "above"
    assert lost(law_of(kernels.Exponential(), [0.0, LENGTH]), "reach_um").side == "unknown"


# --- signs and trough ---------------------------------------------------------------------------------------


@pytest.mark.parametrize("m", [1, 2, 3])
@pytest.mark.parametrize("amplitude", [AMPLITUDE, -AMPLITUDE])
def test_mexican_hat_turns_at_s_root_m_and_is_lowest_at_s_root_m_plus_2(m, amplitude):
    """J = A (1 - q/m) exp(-q/2), q = d^2/s^2: zero at q = m; dJ/dq = 0 at q = m + 2, where J = -(2/m) A e^-(m+2)/2."""
    law = hat(m, amplitude)
    assert figure(law, "sign_change_um") == pytest.approx(LENGTH * math.sqrt(m), rel=EXACT)
    assert figure(law, "trough_um") == pytest.approx(LENGTH * math.sqrt(m + 2), rel=1e-6)  # the step of its slope
    assert figure(law, "trough_depth") == pytest.approx(-2 / m * amplitude * math.exp(-(m + 2) / 2), rel=EXACT)


def test_difference_of_gaussians_in_closed_form():
    """q = d^2 - r^2 and c = 1/s_n^2 - 1/s_w^2: zero at 2 ln(A_n/A_w)/c, trough at 2 ln(A_n s_w^2/(A_w s_n^2))/c."""
    law = difference()
    c = 110.0**-2 - 260.0**-2
    zero = math.sqrt(REFERENCE**2 + 2 * math.log(0.5 / 0.25) / c)
    trough = math.sqrt(REFERENCE**2 + 2 * math.log(0.5 * 260**2 / (0.25 * 110**2)) / c)
    assert figure(law, "sign_change_um") == pytest.approx(zero, rel=EXACT)
    assert figure(law, "trough_um") == pytest.approx(trough, rel=1e-6)
    depth = 0.5 * math.exp(-(trough**2 - REFERENCE**2) / (2 * 110**2)) - 0.25 * math.exp(
        -(trough**2 - REFERENCE**2) / (2 * 260**2)
    )
    assert figure(law, "trough_depth") == pytest.approx(depth, rel=EXACT)
    assert depth < 0


@pytest.mark.parametrize(
    "law", [gaussian(), exponential(), law_of(kernels.Flat(), [-0.1]), law_of(kernels.Disc(), [0.1, 200.0])]
)
def test_a_law_of_one_sign_has_neither_turn_nor_trough(law):
    for name in ("sign_change_um", "trough_um", "trough_depth"):
        assert "one sign at all distances with pairs (60 to 900 µm)" in lost(law, name).reason
    assert lost(law, "trough_um").side == "above"


def test_a_turn_out_of_sight_is_known_by_its_side():
    assert lost(hat(near=230.0, reference=240.0), "sign_change_um").side == "below"  # it turns at 212 µm
    assert lost(hat(far=200.0), "sign_change_um").side == "above"


def test_a_trough_beyond_the_array_says_so():
    """The hat turns at 212 µm and is lowest at 300 µm."""
    law = hat(far=280.0)
    assert figure(law, "sign_change_um") == pytest.approx(LENGTH * math.sqrt(2), rel=EXACT)
    assert "still on its way at the largest distance with pairs (280 µm)" in lost(law, "trough_um").reason
    assert lost(law, "trough_um").side == "above"
    assert lost(law, "trough_depth").side == "below"  # deeper
    assert lost(hat(far=280.0, amplitude=-0.2), "trough_depth").side == "above"
    assert lost(hat(far=200.0), "trough_depth").side == "above"  # towards 0, which is no trough


# --- masses -------------------------------------------------------------------------------------------------


def moment(length, power, m, low, high):
    """int d^(m-1) exp(-(d/length)^power / power) dd by incomplete gamma functions, mpmath to 30 digits."""
    with mpmath.workdps(30):
        scale = mpmath.mpf(length) * mpmath.mpf(power) ** (mpmath.mpf(1) / power)
        ends = [(mpmath.mpf(d) / scale) ** power if d != math.inf else mpmath.inf for d in (low, high)]
        return scale**m / power * mpmath.gammainc(mpmath.mpf(m) / power, *ends)


def sphere(m):
    """Surface of the unit sphere in m dimensions, 2 pi^(m/2) / Gamma(m/2)."""
    return 2 * mpmath.pi ** (mpmath.mpf(m) / 2) / mpmath.gamma(mpmath.mpf(m) / 2)


def gaussian_mass(amplitude, length, m, low, high):
    return (
        sphere(m)
        * amplitude
        * mpmath.exp(mpmath.mpf(REFERENCE) ** 2 / (2 * length**2))
        * moment(length, 2, m, low, high)
    )


def exponential_mass(amplitude, length, m, low, high):
    return sphere(m) * amplitude * mpmath.exp(mpmath.mpf(REFERENCE) / length) * moment(length, 1, m, low, high)


def both_masses(law):
    return figure(law, "mass"), figure(law, "mass_extrapolated")


@pytest.mark.parametrize("m", [1, 2, 3])
def test_mass_of_gaussian_and_exponential(m):
    for law, mass in ((gaussian(m), gaussian_mass), (exponential(m), exponential_mass)):
        seen, beyond = both_masses(law)
        assert seen == pytest.approx(float(mass(AMPLITUDE, LENGTH, m, NEAR, FAR)), rel=EXACT)
        expected = mass(AMPLITUDE, LENGTH, m, 0, NEAR) + mass(AMPLITUDE, LENGTH, m, FAR, math.inf)
        assert beyond == pytest.approx(float(expected), rel=1e-8)  # what the quadrature is asked for


def test_total_mass_of_gaussian_and_exponential_on_the_plane():
    """Fourier transforms at k = 0: 2 pi A s^2 for both, A at d = 0 (as in any table of transforms)."""
    for law, at_zero in (
        (gaussian(), AMPLITUDE * math.exp(REFERENCE**2 / (2 * LENGTH**2))),
        (exponential(), AMPLITUDE * math.exp(REFERENCE / LENGTH)),
    ):
        assert sum(both_masses(law)) == pytest.approx(2 * math.pi * at_zero * LENGTH**2, rel=1e-8)


@pytest.mark.parametrize("m", [1, 2, 3])
def test_mass_of_flat_and_disc(m):
    ball = float(sphere(m)) / m
    assert figure(law_of(kernels.Flat(), [0.3], m=m), "mass") == pytest.approx(
        0.3 * ball * (FAR**m - NEAR**m), rel=EXACT
    )
    seen, beyond = both_masses(law_of(kernels.Disc(), [0.3, 230.0], m=m))
    assert seen == pytest.approx(0.3 * ball * (230.0**m - NEAR**m), rel=EXACT)
    assert beyond == pytest.approx(0.3 * ball * NEAR**m, rel=EXACT)


@pytest.mark.parametrize("m", [1, 2, 3])
def test_mass_of_difference_of_gaussians_and_its_parts(m):
    law = difference(m)
    turn = figure(law, "sign_change_um")

    def exact(low, high):
        return gaussian_mass(0.5, 110.0, m, low, high) - gaussian_mass(0.25, 260.0, m, low, high)

    seen, beyond = both_masses(law)
    assert seen == pytest.approx(float(exact(NEAR, FAR)), rel=1e-8)
    assert beyond == pytest.approx(float(exact(0, NEAR) + exact(FAR, math.inf)), rel=1e-7)
    assert figure(law, "mass_ratio") == pytest.approx(float(-exact(NEAR, turn) / exact(turn, FAR)), rel=1e-8)


def test_a_mexican_hat_is_balanced():
    """On the plane int J d dd = A d^2/2 exp(-d^2/2s^2): over everything zero, over the array what that says."""
    law = hat()
    seen, beyond = both_masses(law)

    def upto(d):
        return 2 * math.pi * AMPLITUDE * d**2 / 2 * math.exp(-(d**2) / (2 * LENGTH**2))

    assert seen == pytest.approx(upto(FAR) - upto(NEAR), rel=1e-8)
    assert seen + beyond == pytest.approx(0.0, abs=1e-8 * upto(LENGTH))
    turn = LENGTH * math.sqrt(2)
    assert figure(law, "mass_ratio") == pytest.approx((upto(turn) - upto(NEAR)) / (upto(turn) - upto(FAR)), rel=1e-8)
    for m in (1, 3):
        assert sum(both_masses(hat(m))) == pytest.approx(0.0, abs=1e-8 * abs(figure(hat(m), "mass")))


def test_a_power_law_has_a_finite_mass_only_above_the_dimension():
    """p = 4 on the plane: int d (1 + d/s)^-4 dd = -(s^2/6) (1 + 3 d/s) / (1 + d/s)^3."""
    s = REFERENCE

    def upto(d):
        return -(s**2) / 6 * (1 + 3 * d / s) / (1 + d / s) ** 3

    law = law_of(kernels.PowerLaw(), [AMPLITUDE, 4.0])
    at_zero = 2 * math.pi * AMPLITUDE * 2**4
    seen, beyond = both_masses(law)
    assert seen == pytest.approx(at_zero * (upto(FAR) - upto(NEAR)), rel=EXACT)
    assert beyond == pytest.approx(at_zero * (upto(NEAR) - upto(0.0) - upto(FAR)), rel=1e-7)
    for exponent in (1.5, 2.0):
        assert (
            "does not fall fast enough"
            in lost(law_of(kernels.PowerLaw(), [AMPLITUDE, exponent]), "mass_extrapolated").reason
        )
    assert not isinstance(figure(law_of(kernels.PowerLaw(), [AMPLITUDE, 1.5], m=1), "mass_extrapolated"), Lost)


@pytest.mark.parametrize(
    "law", [law_of(kernels.Flat(), [0.1]), law_of(kernels.Spline(n_basis=5), [0.3, 0.2, 0.1, 0.1, 0.1])]
)
def test_what_never_falls_has_no_sum_over_the_plane(law):
    assert "finite sum over all of the plane" in lost(law, "mass_extrapolated").reason
    assert figure(law, "mass") > 0


def test_without_a_sign_there_is_no_ratio_of_masses():
    got = lost(gaussian(), "mass_ratio")
    assert got.side == "above"
    assert "nowhere negative" in got.reason
    assert lost(law_of(kernels.Gaussian(), [-0.1, 100.0]), "mass_ratio").side == "below"


@pytest.mark.parametrize(("m", "unit"), [(1, "µm per spike"), (2, "µm² per spike"), (3, "µm³ per spike")])
def test_units_of_mass_follow_the_coordinates(m, unit):
    (mass,) = [f for f in derived_figures(gaussian(m)) if f.name == "mass"]
    assert mass.unit == unit


# --- slope, change, memory ----------------------------------------------------------------------------------


def test_slope_on_log_log_axes():
    """d log J / d log d at r: -r/s, -r^2/s^2, and -p r/(s + r), which is -p/2 at s = r."""
    assert figure(exponential(), "log_log_slope") == pytest.approx(-REFERENCE / LENGTH, rel=1e-7)
    assert figure(gaussian(), "log_log_slope") == pytest.approx(-((REFERENCE / LENGTH) ** 2), rel=1e-7)
    assert figure(law_of(kernels.PowerLaw(), [-0.1, 3.0]), "log_log_slope") == pytest.approx(-1.5, rel=1e-7)
    for law in (law_of(kernels.Flat(), [0.1]), law_of(kernels.Disc(), [0.1, 300.0])):
        assert "does not change around the reference distance" in lost(law, "log_log_slope").reason


def test_change_of_the_rate_at_the_usual_distances():
    law = gaussian()
    names = [f.name for f in derived_figures(law) if f.name.startswith("percent")]
    assert names == [f"percent_change_at_{d}_um" for d in (60, 80, 160, 400)]
    for d, name in zip((60, 80, 160, 400), names, strict=True):
        expected = 100 * math.expm1(AMPLITUDE * math.exp(-(d**2 - REFERENCE**2) / (2 * LENGTH**2)))
        assert figure(law, name) == pytest.approx(expected, rel=1e-12)


def test_distances_that_coincide_or_lie_outside_are_told_once_or_not_at_all():
    names = [f.name for f in derived_figures(gaussian(near=80.0, far=150.0)) if f.name.startswith("percent")]
    assert names == ["percent_change_at_80_um"]
    asked = derived_figures(gaussian(), np.array([200.0, 100.0, 200.0, 2000.0]))
    told = [f for f in asked if f.name.startswith("percent")]
    assert [f.name for f in told] == [f"percent_change_at_{d}_um" for d in (100, 200, 2000)]
    out = told[-1].value(gaussian())
    assert isinstance(out, Lost)
    assert "no pairs at this distance (it has them at 60 to 900 µm)" in out.reason


def test_time_constant_is_one_over_the_leak():
    assert figure(gaussian(), "time_constant_s") == 1 / 40


# --- over all families --------------------------------------------------------------------------------------


@pytest.mark.parametrize("name", sorted(KERNELS))
def test_every_family_has_every_figure_or_a_reason(name):
    """Covers families not yet written."""
    kernel = KERNELS[name]()
    span = DistanceRange(REFERENCE, NEAR, FAR, 2)
    theta = kernel.shape_grid(span)[0]
    setting = Setting(kernel, span, NEAR, FAR, 400.0, theta.size, None, True, Unavailable("no pairs here"))
    law = setting.at(np.append(theta, math.log(40.0)))
    figures = derived_figures(law)
    assert len({f.name for f in figures}) == len(figures)
    for f in figures:
        got = f.value(law)
        assert isinstance(got, Lost) or math.isfinite(got), f.name
        assert not isinstance(got, Lost) or got.reason
        assert f.reads
        assert f.least <= f.most

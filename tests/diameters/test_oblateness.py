import numpy as np
import pytest

from pinlight.diameters.oblateness import oblateness_bound, roche_oblateness


@pytest.mark.parametrize(
    ("mass", "r_eq", "r_pole", "v_eq", "tolerance"),
    [
        # Radii and masses recalled (memory); the recalled sets reproduce the published rotation:
        # HD 10144, Domiciano de Souza et al. (2014), A&A 569, A10: 299 km/s.
        (6.1, 9.16, 6.78, 299.0, 0.002),
        # HD 172167, Aufdenberg et al. (2006), ApJ 645, 664: 275 km/s, for which the Roche figure asks 269.
        (2.3, 2.78, 2.26, 269.0, 0.002),
    ],
)
def test_measured_figures_of_fast_rotators(mass, r_eq, r_pole, v_eq, tolerance):
    assert roche_oblateness(v_eq, r_eq, mass) == pytest.approx(1 - r_pole / r_eq, abs=tolerance)


def test_potential_is_the_same_at_pole_and_equator():
    gm, r_sun = 1.3271244e11, 695_700.0
    flat = roche_oblateness(250.0, 2.5, 2.2)
    r_eq = 2.5 * r_sun
    pole = -gm * 2.2 / (r_eq * (1 - flat))
    equator = -gm * 2.2 / r_eq - 250.0**2 / 2
    assert pole == pytest.approx(equator, rel=1e-12)


def test_the_critical_figure_has_two_thirds_of_its_equator():
    gm, r_sun = 1.3271244e11, 695_700.0
    critical = np.sqrt(gm * 2 / (2 * r_sun))
    assert roche_oblateness(critical * 0.9999, 2.0, 2.0) == pytest.approx(1 / 3, abs=1e-4)
    assert np.isnan(roche_oblateness(critical * 1.001, 2.0, 2.0))


def test_bounds_grow_with_rotation_and_vanish_for_cool_stars():
    bound = oblateness_bound([22.0, 22.0, 34.9, 35.1, 45.0], [False, True, False, False, False])
    # v^2 R / (2 G M) by hand for R/M = 1 in solar units: 150 km/s 0.0590, 280 km/s 0.2055.
    assert bound[0] == pytest.approx(0.0590 / 1.0590, abs=2e-4)
    assert bound[1] == pytest.approx(0.2055 / 1.2055, abs=2e-4)
    assert bound[2] == bound[0]
    assert bound[3] == bound[4] == 0
    assert oblateness_bound([np.nan], [False])[0] == 0

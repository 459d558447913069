import itertools
from dataclasses import replace

import numpy as np
import pytest
from astropy import units
from astropy.coordinates import SkyCoord

from pinlight.errors import InputError
from pinlight.fringes.companions import companion_error, suspected_companion_error
from pinlight.fringes.noise import snr_of_v2
from pinlight.fringes.visibility import disk_argument, sensitivity, visibility
from pinlight.ranking.rank import rank
from pinlight.ranking.setup import quick_setup, setup_of
from pinlight.ranking.target import Target
from tests.ranking.stars import columns

TARGET = Target(100.0, 21.0, name="Copper Wren", magnitudes={"V": 6.0, "H": 4.0, "Ks": 3.9})
QUICK = quick_setup(150.0, 1.65)


def only(ranking):
    assert len(ranking.calibrators) == 1, ranking.excluded
    return ranking.calibrators[0]


def test_the_quick_budget_is_the_formula_by_hand():
    star = only(rank(columns([{"oblateness": 0.04}]), TARGET, QUICK))
    x = disk_argument(0.5, 150.0, 1.65)
    slope = abs(sensitivity(x, 0.3))
    assert star.v2_min == star.v2_max == pytest.approx(visibility(x, 0.3) ** 2, rel=1e-6)
    assert star.budget["diameter"] == pytest.approx(slope * np.hypot(0.008, 0.004) / 0.5, rel=1e-6)
    assert star.budget["shape"] == pytest.approx(slope * 0.04 / (2 * np.sqrt(2)), rel=1e-6)
    assert star.budget["companion"] == 0
    assert [star.budget[name] for name in ("photon", "drift", "brightness")] == [None, None, None]
    assert star.calibration_error == pytest.approx(np.hypot(star.budget["diameter"], star.budget["shape"]))


def test_every_term_of_an_arrays_budget_by_loops(north):
    setup = setup_of(north, ["Ash", "Cedar", "Rowan"], "K")
    mode, drift = setup.mode, setup.drift
    star = only(rank(columns([{"oblateness": 0.05, "flags": "component"}]), TARGET, setup))
    slopes, photons, totals = [], [], []
    width = mode.bandwidth_um / mode.channels
    for pair, channel in itertools.product(setup.baselines, range(mode.channels)):
        # A fine mean over the channel in place of the three nodes of the code.
        um = mode.wavelength_um - mode.bandwidth_um / 2 + width * (channel + (np.arange(400) + 0.5) / 400)
        x = disk_argument(0.5, pair.length_m, um)
        v2 = (visibility(x, 0.3) ** 2).mean()
        slope = abs((visibility(x, 0.3) ** 2 * sensitivity(x, 0.3)).mean() / v2)
        counts = mode.counts_per_frame_at_mag0 / mode.channels * 10 ** (-0.4 * 4.2)
        snr = snr_of_v2(
            counts, v2, mode.system_v2, mode.read_variance, mode.integration_s / mode.frame_ms * 1000
        )
        slopes.append(slope)
        photons.append(1 / snr)
        wander = (
            np.sqrt(2)
            * drift.spread
            * np.sqrt(1 - np.exp(-setup.look_interval_min / drift.time_min - 1 / drift.angle_deg))
        )
        brightness = drift.brightness_per_mag * abs(4.2 - 3.9)
        terms = [slope * np.hypot(0.008, 0.004) / 0.5, 1 / snr, wander, brightness]
        terms += [suspected_companion_error(), slope * 0.05 / (2 * np.sqrt(2))]
        totals.append(np.sqrt(np.sum(np.square(terms))))

    def rms(values):
        return np.sqrt(np.mean(np.square(values)))

    assert star.budget["diameter"] == pytest.approx(rms(slopes) * np.hypot(0.008, 0.004) / 0.5, rel=1e-4)
    assert star.budget["photon"] == pytest.approx(rms(photons), rel=1e-4)
    assert star.budget["drift"] == pytest.approx(wander, rel=1e-4)
    assert star.budget["brightness"] == pytest.approx(brightness, rel=1e-4)
    assert star.budget["companion"] == pytest.approx(suspected_companion_error(), rel=1e-9)
    assert star.calibration_error == pytest.approx(rms(totals), rel=1e-4)
    worst = only(rank(columns([{"oblateness": 0.05, "flags": "component"}]), TARGET, setup, judge="worst"))
    assert worst.calibration_error == pytest.approx(max(totals), rel=1e-4)
    parts = [term for term in worst.budget.values() if term is not None]
    assert np.sqrt(np.sum(np.square(parts))) == pytest.approx(worst.calibration_error)


def test_a_term_that_cannot_be_computed_is_null_and_noted(north):
    setup = setup_of(north, None, "H")
    nameless = Target(100.0, 21.0)
    answer = rank(columns([{}]), nameless, setup)
    assert only(answer).budget["brightness"] is None
    assert answer.to_dict()["calibrators"][0]["budget_percent"]["brightness"] is None
    assert any("no H magnitude" in note for note in answer.notes)


@pytest.mark.parametrize(
    ("star", "reason"),
    [
        ({"ra_deg": 120.0}, "too_far"),
        ({"ra_deg": TARGET.ra_deg, "dec_deg": TARGET.dec_deg}, "is_target"),
        ({"ra_deg": TARGET.ra_deg, "dec_deg": TARGET.dec_deg + 20 / 3600}, "target_companion"),
        ({"theta": np.nan}, "no_diameter"),
        ({"H": np.nan}, "no_magnitude"),
        ({"H": 8.5}, "too_faint"),
        ({"flags": "spectroscopic_binary"}, "close_binary"),
        ({"flags": "eclipsing_binary variable"}, "close_binary"),
        ({"flags": "composite_spectrum"}, "close_binary"),
        ({"flags": "double"}, "companion"),
        ({"companions": [(1.0, 1.5, 1.5)]}, "companion"),
        ({"flags": "variable mira"}, "variable"),
        ({"flags": "be_star"}, "variable"),
        ({"flags": "discordant"}, "discordant"),
        ({"theta": 2.6}, "resolved"),
    ],
)
def test_every_gate_counts_its_star_by_reason(star, reason):
    answer = rank(columns([star, {"dec_deg": 20.5}]), TARGET, QUICK)
    assert answer.excluded == {reason: 1}
    assert [c.star_id for c in answer.calibrators] == [2]


@pytest.mark.parametrize(
    ("words", "reason"),
    [
        *((word, "close_binary") for word in (
            "spectroscopic_binary", "eclipsing_binary", "ellipsoidal", "active_binary", "cataclysmic",
            "xray_binary", "composite_spectrum",
        )),
        *((word, "variable") for word in (
            "pulsating", "semiregular", "long_period", "mira", "cepheid", "rr_lyrae", "rv_tauri",
            "sx_phoenicis", "flare", "orion_variable", "irregular", "r_crb", "be_star", "emission_line",
            "pre_main_sequence", "t_tauri", "carbon_star", "s_star", "wolf_rayet",
        )),
    ],
)  # fmt: skip
def test_every_unsteady_kind_is_kept_out(words, reason):
    assert rank(columns([{"flags": words}]), TARGET, QUICK).excluded == {reason: 1}


@pytest.mark.parametrize(
    "word", ["delta_scuti", "gamma_doradus", "beta_cephei", "alpha2_cvn", "by_draconis", "rotating", "variable"]
)
def test_small_variables_stay_in(word):
    assert rank(columns([{"flags": word}]), TARGET, QUICK).excluded == {}


def test_a_companion_excludes_from_five_per_cent_on():
    # sqrt(2) f / (1 + f)^2 = 0.05 at f = 0.0383, 3.54 mag fainter.
    answer = rank(
        columns([{"companions": [(1.0, 0, 3.4)]}, {"dec_deg": 20.5, "companions": [(1.0, 0, 3.7)]}]),
        TARGET,
        QUICK,
    )
    assert answer.excluded == {"companion": 1}
    assert only(answer).star_id == 2


def test_a_companion_counts_in_the_band_of_the_camera(north):
    stars = columns([{"companions": [(1.0, 4.0, 6.0)]}])
    visible, infrared = (
        only(rank(stars, TARGET, setup_of(north, ["Ash", "Birch"], name))) for name in ("red", "K")
    )
    assert visible.budget["companion"] == pytest.approx(float(companion_error(10**-1.6)), rel=1e-6)
    assert infrared.budget["companion"] == pytest.approx(float(companion_error(10**-2.4)), rel=1e-6)


def test_the_time_between_looks_is_an_integration_and_a_slew(north):
    # Common practice, no source: five minutes to slew and find fringes.
    assert setup_of(north, None, "red").look_interval_min == pytest.approx(420 / 60 + 5)


def test_a_star_that_never_rises_is_kept_out(north):
    stars = columns([{"dec_deg": -25.0}, {"dec_deg": -20.0}])
    # 90 - 38.4 + 21.6: culmination at 30 deg, the array's limit, for declination -21.6.
    answer = rank(stars, Target(100.0, -22.0), setup_of(north, None, "H"))
    assert answer.excluded == {"never_up": 1}
    assert any("never rises" in note for note in answer.notes)


def test_past_the_first_null_a_star_is_no_calibrator_whatever_the_floor():
    stars = columns([{"theta": 5.5, "u": 0.0}])
    limits = QUICK.limits.replace(v2_min=0.0)
    assert rank(stars, TARGET, QUICK, limits=limits).excluded == {"resolved": 1}


def test_too_bright_and_barred(south):
    setup = setup_of(south, None, "H")
    stars = columns([{"H": -2.0}, {"dec_deg": 20.5}, {"dec_deg": 20.6}])
    answer = rank(stars, TARGET, setup, standings={2: "barred", 3: "doubted"})
    assert answer.excluded == {"too_bright": 1, "barred": 1}
    assert only(answer).standing == "doubted"


def test_small_variables_and_faint_companions_stay_in_with_their_cost():
    stars = columns(
        [
            {"flags": "variable delta_scuti"},
            {"dec_deg": 20.5, "companions": [(1.2, 9.0, 4.0)]},
            {"dec_deg": 20.6, "companions": [(30.0, 0.0, 0.0)]},
        ]
    )
    answer = rank(stars, TARGET, QUICK)
    assert answer.excluded == {}
    terms = {c.star_id: c.budget["companion"] for c in answer.calibrators}
    assert terms[1] == terms[3] == 0  # the third's companion is outside the field
    assert terms[2] == pytest.approx(float(companion_error(10**-1.6)), rel=1e-6)


def test_a_component_whose_neighbour_is_known_is_not_suspected():
    stars = columns(
        [{"flags": "component", "companions": [(30.0, 1.0, 1.0)]}, {"dec_deg": 20.5, "flags": "component"}]
    )
    terms = {c.star_id: c.budget["companion"] for c in rank(stars, TARGET, QUICK).calibrators}
    assert terms[1] == 0
    assert terms[2] == pytest.approx(suspected_companion_error())


def test_the_target_itself_is_known_by_its_id_wherever_it_has_moved():
    stars = columns([{"dec_deg": 20.9}, {"dec_deg": 20.5}])
    answer = rank(stars, replace(TARGET, star_id=1), QUICK)
    assert answer.excluded == {"is_target": 1}


def test_best_come_first_and_counts_add_up():
    random = np.random.default_rng(4)
    many = [
        {"ra_deg": float(ra), "dec_deg": float(dec), "theta": float(theta), "H": float(h)}
        for ra, dec, theta, h in zip(
            random.uniform(70, 130, 400),
            random.uniform(-10, 50, 400),
            random.uniform(0.1, 2.5, 400),
            random.uniform(2, 10, 400),
            strict=True,
        )
    ]
    answer = rank(columns(many), TARGET, QUICK, best=7)
    errors = [c.calibration_error for c in answer.calibrators]
    assert errors == sorted(errors)
    assert [c.rank for c in answer.calibrators] == list(range(1, 8))
    assert answer.ranked + sum(answer.excluded.values()) == answer.stars == 400
    everything = rank(columns(many), TARGET, QUICK, best=1000)
    assert [c.star_id for c in everything.calibrators[:7]] == [c.star_id for c in answer.calibrators]
    for star in everything.calibrators:
        apart = SkyCoord(star.ra_deg, star.dec_deg, unit="deg").separation(SkyCoord(100.0, 21.0, unit="deg"))
        assert star.separation_deg == pytest.approx(apart.deg, abs=1e-9)
        assert apart < 10 * units.deg


@pytest.mark.parametrize(
    ("ra", "dec", "radius"),
    [(0.0, 0.0, 12), (359.9, -89.5, 25), (10.0, 90.0, 8), (200.0, 45.0, 180), (33.3, -12.0, 1.0)],
)
def test_a_cone_finds_what_a_scan_of_all_stars_finds(ra, dec, radius):
    random = np.random.default_rng(9)
    many = [
        {"ra_deg": float(a), "dec_deg": float(d)}
        for a, d in zip(
            random.uniform(0, 360, 3000), np.degrees(np.arcsin(random.uniform(-1, 1, 3000))), strict=True
        )
    ]
    stars = columns(many)
    rows, apart = stars.cone(ra, dec, radius)
    all_apart = SkyCoord(stars.ra_deg, stars.dec_deg, unit="deg").separation(SkyCoord(ra, dec, unit="deg")).deg
    assert sorted(rows) == list(np.flatnonzero(all_apart <= radius))
    np.testing.assert_allclose(apart, all_apart[rows], atol=1e-9)


def test_an_empty_result_is_an_answer():
    answer = rank(columns([{"H": 9.0}]), TARGET, QUICK)
    assert answer.calibrators == ()
    assert answer.to_dict()["calibrators"] == []
    assert answer.to_dict()["best_sets"] == []
    assert len(answer.table()) == 0
    assert answer.excluded == {"too_faint": 1}


def test_the_table_has_units_and_survives_a_file(tmp_path, north):
    from astropy.table import QTable

    answer = rank(columns([{}, {"dec_deg": 20.4}]), TARGET, setup_of(north, None, "H"))
    table = answer.table()
    assert table["limb_darkened_diameter"].unit == units.mas
    table.write(tmp_path / "ranking.ecsv")
    back = QTable.read(tmp_path / "ranking.ecsv")
    assert list(back["name"]) == list(table["name"])
    np.testing.assert_allclose(
        back["calibration_error_percent"], [100 * star.calibration_error for star in answer.calibrators]
    )


@pytest.mark.parametrize(
    ("change", "message"),
    [
        ({"judge": "median"}, "judge is 'median'; it may be rms or worst"),
        ({"best": 0}, "best is 0; it must lie between 1 and 1000"),
        ({"limits": {"v2_min": 1.5}}, "v2_min is 1.5; it must lie between 0 and 1"),
        ({"limits": {"separation_max_deg": -2}}, "separation_max_deg is -2; it must lie between 0 and 180"),
        ({"limits": {"magnitude_max": float("nan")}}, "magnitude_max is nan; it must lie between -5 and 30"),
    ],
)
def test_impossible_parameters_are_named(change, message):
    def ask():
        limits = QUICK.limits.replace(**change.get("limits", {}))
        others = {key: value for key, value in change.items() if key != "limits"}
        return rank(columns([{}]), TARGET, QUICK, limits=limits, **others)

    with pytest.raises(InputError, match=message):
        ask()


@pytest.mark.parametrize(
    ("baseline_m", "wavelength_um", "message"),
    [
        (0.0, 1.65, "baseline_m is 0; it must lie above 0"),
        (-5.0, 1.65, "baseline_m is -5"),
        (float("nan"), 1.65, "baseline_m is nan"),
        (100.0, 2200.0, r"wavelength_um is 2200; it must lie between 0.1 and 30 \(2200 nm is 2.2 um\)"),
        (100.0, 0.0, "wavelength_um is 0; it must lie between 0.1 and 30"),
    ],
)
def test_an_impossible_quick_setup_is_named(baseline_m, wavelength_um, message):
    with pytest.raises(InputError, match=message):
        quick_setup(baseline_m, wavelength_um)


@pytest.mark.parametrize(
    ("values", "message"),
    [
        ({"dec_deg": 95.0}, "dec_deg is 95; it must lie between -90 and 90"),
        ({"ra_deg": float("nan")}, "ra_deg is nan"),
        ({"diameter_mas": -1.0}, "diameter_mas is -1; it must be positive"),
        ({"magnitudes": {"H": 99.0}}, "H is 99; a magnitude lies between -5 and 30"),
        ({"magnitudes": {"Z": 5.0}}, "band is 'Z'"),
    ],
)
def test_an_impossible_target_is_named(values, message):
    with pytest.raises(InputError, match=message):
        Target(**({"ra_deg": 10.0, "dec_deg": 10.0} | values))

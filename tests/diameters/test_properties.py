"""What must hold of every prediction, whatever the star."""

import numpy as np
import pytest
from hypothesis import given, settings
from hypothesis import strategies as st

from pinlight.diameters.prediction import StarPhotometry, predict_diameters
from pinlight.diameters.relations import RelationSet, load_relations
from pinlight.errors import InputError
from pinlight.faces.diameter import StarRow, predict_rows

BANDS = ("B", "V", "J", "H", "Ks")
RELATIONS = load_relations()
# A dwarf, a subgiant, a giant, an early and a late star, colours as in Bessell & Brett (1988), rounded.
STARS = st.sampled_from(
    [
        ("G2V", (0.63, 1.14, 1.48, 1.54)),
        ("F8IV", (0.54, 0.98, 1.25, 1.31)),
        ("K1III", (1.08, 1.82, 2.36, 2.46)),
        ("A5V", (0.15, 0.30, 0.37, 0.40)),
        ("K4V", (1.05, 1.85, 2.42, 2.53)),
        ("B5V", (-0.16, -0.36, -0.44, -0.50)),
    ]
)


def magnitudes_of(colours, v_mag):
    b_v, v_j, v_h, v_ks = colours
    return np.array([v_mag + b_v, v_mag, v_mag - v_j, v_mag - v_h, v_mag - v_ks])


def predict(magnitudes, errors, kind, relations=RELATIONS, av=0.0, av_error=0.05):
    rows = np.atleast_2d(magnitudes)
    return predict_diameters(
        StarPhotometry(
            rows,
            np.broadcast_to(np.asarray(errors, float), rows.shape),
            [kind] * len(rows),
            np.full(len(rows), 50.0),
            np.full(len(rows), 60.0),
            av_mag=np.full(len(rows), av),
            av_error_mag=np.full(len(rows), av_error),
        ),
        relations,
    )


@settings(max_examples=60, deadline=None)
@given(star=STARS, v_mag=st.floats(2, 9), order=st.permutations(range(len(RELATIONS.relations))))
def test_another_relation_never_makes_a_consistent_stars_error_larger(star, v_mag, order):
    kind, colours = star
    relations = tuple(RELATIONS.relations[i] for i in order)
    magnitudes = magnitudes_of(colours, v_mag)
    best = np.inf
    for count in range(1, len(relations) + 1, 5):
        found = predict(magnitudes, 0.1, kind, RelationSet(relations[:count], ""))
        if np.isfinite(found.limb_darkened_mas[0]):
            if found.chi_squared[0] > max(found.degrees_of_freedom[0], 1):
                break  # consistent no more: its error grows, as it should
            relative = found.error_mas[0] / found.limb_darkened_mas[0]
            assert relative <= best * (1 + 1e-9)
            best = relative


@settings(max_examples=60, deadline=None)
@given(star=STARS, v_mag=st.floats(2, 9), missing=st.sets(st.integers(0, 4), max_size=4))
def test_a_missing_band_only_takes_away_the_relations_that_need_it(star, v_mag, missing):
    kind, colours = star
    full = magnitudes_of(colours, v_mag)
    part = full.copy()
    part[list(missing)] = np.nan
    whole, less = predict(full, 0.02, kind), predict(part, 0.02, kind)
    gone = {BANDS[i] for i in missing}
    # K_BB is made of Ks, J_BB of J and Ks, H_BB of all three.
    lost = gone | {"K_BB" for _ in gone & {"Ks"}} | {"J_BB" for _ in gone & {"J", "Ks"}}
    lost |= {"H_BB" for _ in gone & {"J", "H", "Ks"}}
    wanted = [
        name
        for name in whole.relations_used(0)
        if not lost & {r for one in RELATIONS.relations if one.name == name for r in (one.bluer, one.redder)}
    ]
    assert less.relations_used(0) == wanted
    assert np.isnan(less.limb_darkened_mas[0]) == (not wanted)
    for name in wanted:
        before, after = (found.log_thetas[0, found.relation_set.names.index(name)] for found in (whole, less))
        assert before == after


@settings(max_examples=40, deadline=None)
@given(star=STARS, v_mag=st.floats(2, 9), fainter=st.floats(0.1, 8))
def test_a_star_five_magnitudes_fainter_is_ten_times_smaller(star, v_mag, fainter):
    kind, colours = star
    bright, faint = predict(
        np.stack([magnitudes_of(colours, v_mag), magnitudes_of(colours, v_mag + fainter)]), 0.02, kind
    ).limb_darkened_mas
    assert faint == pytest.approx(bright * 10 ** (-0.2 * fainter), rel=1e-9)


@settings(max_examples=40, deadline=None)
@given(star=STARS, v_mag=st.floats(2, 9))
def test_extinction_zero_changes_nothing(star, v_mag):
    kind, colours = star
    magnitudes = dict(zip(BANDS, magnitudes_of(colours, v_mag).tolist(), strict=True))
    none = StarRow(magnitudes, spectral_type=kind)
    zero = StarRow(magnitudes, spectral_type=kind, av_mag=0.0, av_error_mag=0.05)
    by_map = StarRow(magnitudes, spectral_type=kind, parallax_mas=20.0, ra_deg=10.0, dec_deg=20.0)
    answers = predict_rows([none, zero])
    assert answers[0]["diameter"] == answers[1]["diameter"]
    [mapped] = predict_rows([by_map], extinction_map=lambda *_: (0.0, 0.05))
    for key in ("limb_darkened_mas", "own_error_mas", "shared_error_mas", "relations"):
        assert mapped["diameter"][key] == answers[1]["diameter"][key]


@settings(max_examples=40, deadline=None)
@given(star=STARS, v_mag=st.floats(2, 9), av=st.floats(0.01, 0.4))
def test_a_reddened_star_given_its_extinction_comes_back(star, v_mag, av):
    from pinlight.photometry.extinction import relative_extinction

    kind, colours = star
    clear = magnitudes_of(colours, v_mag)
    reddened = clear + av * np.array([relative_extinction(band) for band in BANDS])
    assert predict(reddened, 0.02, kind, av=av).limb_darkened_mas[0] == pytest.approx(
        predict(clear, 0.02, kind).limb_darkened_mas[0], rel=1e-9
    )


@settings(max_examples=40, deadline=None)
@given(star=STARS, v_mag=st.floats(2, 9), parts=st.lists(st.integers(0, 5), min_size=2, max_size=30))
def test_a_star_does_not_care_about_its_neighbours_in_the_table(star, v_mag, parts):
    kind, colours = star
    magnitudes = np.stack([magnitudes_of(colours, v_mag)] * len(parts))
    for row, part in enumerate(parts):
        if part < 5:
            magnitudes[row, part] = np.nan
    together = predict(magnitudes, 0.02, kind)
    for row in range(len(parts)):
        alone = predict(magnitudes[row], 0.02, kind)
        np.testing.assert_allclose(
            [together.limb_darkened_mas[row], together.error_mas[row]],
            [alone.limb_darkened_mas[0], alone.error_mas[0]],
            rtol=1e-12,
        )


@pytest.mark.parametrize(
    ("values", "message"),
    [
        ({"magnitudes": {"V": 99.0, "Ks": 3.3}}, r"V is 99; a magnitude lies between -5 and 30"),
        ({"magnitudes": {"V": float("nan"), "Ks": 3.3}}, r"V is nan; a magnitude lies between"),
        (
            {"magnitudes": {"V": 5.0, "Ks": 3.3}, "errors": {"V": -0.02}},
            r"V_error is -0.02; it must be positive",
        ),
        (
            {"magnitudes": {"V": 5.0, "Ks": 3.3}, "parallax_mas": -3.0},
            r"parallax_mas is -3; it must lie between",
        ),
        ({"magnitudes": {"V": 5.0, "Ks": 3.3}, "parallax_mas": 5000.0}, r"parallax_mas is 5000; it must lie"),
        ({"magnitudes": {"V": 5.0, "Q": 3.3}}, r"band is 'Q'; it may be one of B, V, J"),
    ],
)
def test_what_nobody_can_mean_gets_a_reason(values, message):
    with pytest.raises(InputError, match=message):
        StarRow(**values)


@settings(max_examples=60, deadline=None)
@given(
    v_mag=st.floats(3, 9),
    v_ks=st.floats(1.4, 5),
    kind=st.sampled_from(["", "G2V", "K1III", "M2V"]),
    b_v=st.floats(0.3, 1.6),
)
def test_swapped_magnitudes_get_a_reason_and_no_number(v_mag, v_ks, kind, b_v):
    # A star of V - Ks above 1.3 with the two swapped is bluer than any star.
    row = StarRow({"B": v_mag + b_v, "V": v_mag - v_ks, "Ks": v_mag}, spectral_type=kind)
    [answer] = predict_rows([row])
    assert answer["diameter"] is None
    assert "no star is so blue: are the two swapped?" in answer["reason"]

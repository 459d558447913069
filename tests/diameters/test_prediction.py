from dataclasses import replace

import numpy as np
import pytest

from pinlight.diameters.prediction import StarPhotometry, predict_diameters
from pinlight.diameters.relations import RelationSet, load_relations
from pinlight.photometry.bands import default_errors
from pinlight.photometry.extinction import relative_extinction
from pinlight.photometry.systems import CATALOGUE_BANDS, SYSTEM_BANDS, to_systems


def photometry(rows, types, parallax=100.0, av=None, errors=None):
    magnitudes = np.array([[row.get(band, np.nan) for band in CATALOGUE_BANDS] for row in rows], dtype=float)
    assumed = [default_errors(band, magnitudes[:, i]) for i, band in enumerate(CATALOGUE_BANDS)]
    count = len(rows)
    return StarPhotometry(
        magnitudes=magnitudes,
        errors=np.stack(assumed, axis=1) if errors is None else np.full(magnitudes.shape, errors),
        spectral_types=list(types),
        parallax_mas=np.broadcast_to(np.asarray(parallax, float), count),
        galactic_latitude_deg=np.full(count, 60.0),
        av_mag=None if av is None else np.full(count, av),
        av_error_mag=None if av is None else np.full(count, 0.05),
    )


def second_way(magnitudes, errors, group, code, av, av_error):
    """The combination for one star by loops and finite differences, from the formulas alone."""
    linear = to_systems(CATALOGUE_BANDS, np.zeros((1, 5)))
    scatter = np.diag(linear.by_scatter)
    assert (linear.by_scatter == np.diag(scatter)).all()
    extinction = np.array([relative_extinction(name) for name in CATALOGUE_BANDS])

    def colours(mags, a_v, shift):
        values = linear.by_input @ (mags - a_v * extinction) + linear.values[0] + shift
        return dict(zip(SYSTEM_BANDS, values, strict=True))

    none = np.zeros(len(SYSTEM_BANDS))

    def log_theta(relation, mags, a_v, shift=none):
        found = colours(mags, a_v, shift)
        return relation.log_diameter(found[relation.zero_band], found[relation.bluer] - found[relation.redder])

    used = []
    for relation in load_relations().relations:
        found = colours(magnitudes, av, none)
        colour = found[relation.bluer] - found[relation.redder]
        if (
            group in relation.luminosity
            and relation.spectral_min <= code <= relation.spectral_max
            and relation.colour_min <= colour <= relation.colour_max
        ):
            used.append(relation)
    y = np.array([log_theta(relation, magnitudes, av) for relation in used])
    step = 1e-5
    nuisances = [(np.eye(5)[i] * errors[i], 0.0, none) for i in range(5)]
    nuisances.append((np.zeros(5), av_error, none))
    nuisances += [
        (np.zeros(5), 0.0, np.eye(len(SYSTEM_BANDS))[i] * scatter[i]) for i in range(len(SYSTEM_BANDS))
    ]
    covariance = np.zeros((len(used), len(used)))
    for change, d_av, shift in nuisances:
        moved = [
            (
                log_theta(r, magnitudes + step * change, av + step * d_av, step * shift)
                - log_theta(r, magnitudes - step * change, av - step * d_av, -step * shift)
            )
            / (2 * step)
            for r in used
        ]
        covariance += np.outer(moved, moved)
    common = np.zeros_like(covariance)
    for i, a in enumerate(used):
        covariance[i, i] += (a.scatter_percent**2 - a.common_percent**2) / 1e4 / np.log(10) ** 2
        for j, b in enumerate(used):
            if a.sample == b.sample:
                covariance[i, j] += a.common_percent * b.common_percent / 1e4 / np.log(10) ** 2
                common[i, j] = a.shared_percent * b.shared_percent / 1e4 / np.log(10) ** 2
    inverse = np.linalg.inv(covariance + common)
    ones = np.ones(len(used))
    variance = 1 / (ones @ inverse @ ones)
    weights = variance * inverse @ ones
    mean = weights @ y
    chi2 = (y - mean) @ inverse @ (y - mean)
    scale = max(1.0, chi2 / (len(used) - 1))
    shared = weights @ common @ weights
    return 10**mean, np.sqrt(variance * scale - shared), np.sqrt(shared), chi2


@pytest.mark.parametrize(
    ("star", "kind", "code", "group"),
    [
        ({"B": 6.3, "V": 5.7, "J": 6.1 - 1.5, "H": 4.35, "Ks": 4.28}, "G0V", 40, "dwarf"),
        ({"B": 7.1, "V": 6.9, "J": 6.6, "H": 6.55, "Ks": 6.5}, "A7V", 27, "dwarf"),
        ({"B": 8.2, "V": 7.1, "J": 5.35, "H": 4.8, "Ks": 4.68}, "K1III", 51, "giant"),
        ({"B": 9.9, "V": 8.9, "J": 7.3, "H": 6.75, "Ks": 6.65}, "K3V", 53, "dwarf"),
    ],
)
def test_the_combination_written_a_second_way(star, kind, code, group):
    stars = photometry([star], [kind], av=0.1)
    result = predict_diameters(stars, load_relations())
    theta, own, shared, chi2 = second_way(stars.magnitudes[0], stars.errors[0], group, code, 0.1, 0.05)
    assert result.limb_darkened_mas[0] == pytest.approx(theta, rel=1e-7)
    assert result.own_error_mas[0] / theta / np.log(10) == pytest.approx(own, rel=1e-6)
    assert result.shared_error_mas[0] / theta / np.log(10) == pytest.approx(shared, rel=1e-6)
    assert result.chi_squared[0] == pytest.approx(chi2, rel=1e-6)


def consistent_star():
    """Magnitudes for which the relations agree: those of the Sun at 10 pc."""
    return {"B": 5.437, "V": 4.811, "J": 3.668, "H": 3.324, "Ks": 3.274}


def test_adding_a_relation_never_makes_a_consistent_stars_error_larger():
    stars = photometry([consistent_star()], ["G2V"], av=0.0, errors=0.05)
    errors, relations = [], load_relations().relations
    for count in range(1, len(relations) + 1):
        result = predict_diameters(stars, RelationSet(relations[:count], "some"))
        assert result.chi_squared[0] <= max(result.degrees_of_freedom[0], 1)
        errors.append(result.error_mas[0] / result.limb_darkened_mas[0])
    assert (np.diff(errors) <= 1e-12).all()


def test_a_missing_band_only_takes_away_the_relations_that_need_it():
    full = consistent_star()
    whole = predict_diameters(photometry([full], ["G2V"], av=0.0), load_relations())
    without = {band: value for band, value in full.items() if band != "B"}
    part = predict_diameters(photometry([without], ["G2V"], av=0.0), load_relations())
    lost = set(whole.relations_used(0)) - set(part.relations_used(0))
    assert lost == {"K04_BV", "K04_BJ", "K04_BH", "K04_BK"}


def test_extinction_zero_changes_nothing_and_some_makes_the_star_bluer():
    star = consistent_star()
    near = predict_diameters(photometry([star], ["G2V"], parallax=100.0), load_relations())
    zero = predict_diameters(photometry([star], ["G2V"], av=0.0), load_relations())
    assert near.limb_darkened_mas[0] == zero.limb_darkened_mas[0]
    some = predict_diameters(photometry([star], ["G2V"], av=0.3), load_relations())
    assert some.limb_darkened_mas[0] < zero.limb_darkened_mas[0]


def test_an_infrared_excess_is_discordant_and_its_culprit_named():
    star = consistent_star() | {"Ks": 3.274 - 0.5}
    result = predict_diameters(photometry([star], ["G2V"], av=0.0, errors=0.02), load_relations())
    assert result.discordant[0]
    culprit = result.relation_set.names[result.culprit[0]]
    assert culprit in result.relations_used(0)
    largest = np.nanmax(np.abs(result.pulls[0]))
    assert abs(result.pulls[0, result.culprit[0]]) == largest > 2
    honest = predict_diameters(photometry([consistent_star()], ["G2V"], av=0.0, errors=0.02), load_relations())
    assert honest.culprit[0] == -1
    assert result.own_error_mas[0] > 1.5 * honest.own_error_mas[0]


def test_discordance_is_a_probability_below_one_per_cent():
    random = np.random.default_rng(8)
    rows = [
        {band: value + random.normal(0, 0.1) for band, value in consistent_star().items()} for _ in range(600)
    ]
    result = predict_diameters(photometry(rows, ["G2V"] * 600, av=0.0, errors=0.02), load_relations())
    np.testing.assert_array_equal(result.discordant, result.probability < 0.01)
    assert ((result.probability > 1e-4) & (result.probability < 0.01)).sum() >= 5
    assert 0 < result.discordant.sum() < 600


def test_a_star_behind_dust_is_hotter_than_its_colour():
    star = {"V": 6.0, "Ks": 3.6, "H": 3.75}
    near, far = (
        predict_diameters(photometry([star], [""], av=av), load_relations()).teff_k[0] for av in (0.0, 0.5)
    )
    assert far > near + 150


def test_a_missing_class_is_judged_without_the_dust():
    # At absolute Ks 1.6 what the dust takes, 0.12 A_V, and the colour it gives make a dwarf of a giant.
    star = {"V": 1.6 + 2.5 + 5, "Ks": 1.6 + 5}
    none, some = (
        predict_diameters(photometry([star], ["K1"], parallax=10.0, av=av), load_relations())
        for av in (0.0, 0.4)
    )
    assert (
        none.luminosity_group[0] == "dwarf" or none.group_probabilities[0, 2] > some.group_probabilities[0, 2]
    )
    near, far = (
        predict_diameters(
            photometry([{"V": m + 2.5 + 5, "Ks": m + 5}], ["K1"], parallax=10.0, av=0.0), load_relations()
        ).group_probabilities[0, 2]
        for m in (1.6, 1.6 - 0.12 * 0.4)
    )
    assert near < far


def test_a_star_that_may_be_a_giant_or_a_dwarf_has_an_error_for_both():
    # V - Ks = 2.05 and absolute Ks 0.25: the seed's classed stars are 37 % giants there.
    star = {"V": 0.25 + 2.05 + 5, "Ks": 0.25 + 5, "H": 0.25 + 0.1 + 5}
    unsure, giant, dwarf = (
        predict_diameters(photometry([star], [kind], parallax=10.0, av=0.0, errors=0.01), load_relations())
        for kind in ("K0", "K0III", "K0IV")
    )
    assert unsure.group_probabilities[0] == pytest.approx([0.23, 0.40, 0.37, 0.0], abs=0.01)
    assert giant.group_probabilities[0].tolist() == [0, 0, 1, 0]
    same = {"subgiant": dwarf, "giant": giant}[unsure.luminosity_group[0]]
    other = giant if same is dwarf else dwarf
    assert unsure.limb_darkened_mas[0] == pytest.approx(same.limb_darkened_mas[0], rel=1e-6)
    apart = np.log(other.limb_darkened_mas[0] / same.limb_darkened_mas[0])
    probability = unsure.group_probabilities[0, 2 if other is giant else 1]
    relative = unsure.own_error_mas[0] / unsure.limb_darkened_mas[0]
    before = same.own_error_mas[0] / same.limb_darkened_mas[0]
    assert relative == pytest.approx(np.sqrt(before**2 + probability * apart**2), rel=1e-3)


def test_a_type_that_contradicts_the_colours_is_discordant():
    # K0 III leads one to expect V - Ks = 2.3 (Bessell & Brett 1988); HD 29206 is called one, at 3.8.
    rows = [
        {"B": 10.9, "V": 9.38, "J": 6.45, "H": 5.751, "Ks": 5.547},
        {"V": 9.38, "Ks": 9.38 - 2.3},
        {"V": 6.0, "Ks": 6.0 - 0.8},
    ]
    result = predict_diameters(photometry(rows, ["K0III", "K0III", "G2V"], av=0.1), load_relations())
    assert list(result.discordant) == [True, False, True]
    assert result.culprit_name(0) == "spectral type"
    assert result.culprit_name(1) is None


def test_saturated_photometry_is_wrong_for_all_stars_together():
    stars = photometry([consistent_star()], ["G2V"], av=0.0)
    plain = predict_diameters(stars, load_relations())
    shared = predict_diameters(replace(stars, shared_errors=np.full((1, 5), 0.1)), load_relations())
    assert shared.shared_error_mas[0] > 1.5 * plain.shared_error_mas[0]


def test_a_late_subgiant_is_beyond_the_range_of_the_relation_that_ends_at_k0():
    star = {"B": 7.2, "V": 6.2, "J": 4.5, "H": 4.0, "Ks": 3.9}
    early, late = (
        predict_diameters(photometry([star], [kind], av=0.0), load_relations()).relations_used(0)
        for kind in ("K0IV", "K1IV")
    )
    assert "K04_VK" in early
    assert not any(name.startswith("K04") for name in late)
    assert "B14_VK" in late


def test_dwarfs_giants_and_early_types_use_their_own_relations():
    rows = [
        {"V": 6.0, "Ks": 4.4, "H": 4.5},
        {"V": 6.0, "Ks": 3.6, "H": 3.75},
        {"V": 6.0, "Ks": 6.4, "H": 6.4},
        {"V": 9.0, "Ks": 4.9, "H": 5.1},
    ]
    result = predict_diameters(photometry(rows, ["G2V", "K0III", "B3V", "M2V"], av=0.0), load_relations())
    samples = [{name.split("_")[0] for name in result.relations_used(row)} for row in range(4)]
    assert samples[0] == {"K04", "B14", "A18"}
    assert samples[1] == {"P19", "A18", "DB05", "N02"}
    assert samples[2] == {"CH14"}
    assert result.relations_used(3) == ["K04_VK_M"]


def test_the_shared_error_does_not_average_down_over_a_team():
    # Ten stars seen through one relation: draw its sample's systematic once, and for each star its scatter
    # and the errors of its magnitudes and extinction, as the formulas of `second_way` say; nothing of the
    # prediction's own covariance is used.
    one = RelationSet(tuple(r for r in load_relations().relations if r.name == "K04_VK"), "one")
    [relation] = one.relations
    count, trials = 10, 4000
    star = {"V": 4.811, "Ks": 3.274}
    result = predict_diameters(photometry([star] * count, ["G2V"] * count, av=0.0, errors=0.02), one)
    random = np.random.default_rng(5)
    v = random.normal(star["V"], 0.02, (trials, count))
    k = random.normal(star["Ks"] + 0.039, np.hypot(0.02, 0.02), (trials, count))  # K_BB adds 0.02 of its own
    av = random.normal(0, 0.05, (trials, count))
    v0, k0 = v - av, k - relative_extinction("K_BB") * av
    scatter = random.normal(0, relation.scatter_percent / 100, (trials, count))
    systematic = random.normal(0, relation.shared_percent / 100, (trials, 1))
    drawn = 10 ** relation.log_diameter(v0, v0 - k0) * (1 + scatter) * (1 + systematic)
    mean = drawn.mean(axis=1)
    own, shared = (part[0] for part in (result.own_error_mas, result.shared_error_mas))
    assert drawn[:, 0].std() == pytest.approx(result.error_mas[0], rel=0.05)
    assert mean.std() == pytest.approx(np.hypot(own / np.sqrt(count), shared), rel=0.05)
    assert mean.std() > 0.97 * shared
    # Without the systematic it would average down to a third.
    assert (drawn / (1 + systematic)).mean(axis=1).std() < 0.4 * drawn[:, 0].std()


def test_what_a_star_shows_in_every_relation_of_a_sample_does_not_average_down():
    relations = load_relations().relations
    like = next(r for r in relations if r.name == "B14_VK")
    twins = tuple(replace(like, name=f"twin {i}") for i in range(8))
    alone = tuple(replace(twin, common_percent=0.0) for twin in twins)
    stars = photometry([{"V": 4.811, "Ks": 3.274}], ["G2V"], av=0.0, errors=0.01)
    together, apart = (predict_diameters(stars, RelationSet(group, "")) for group in (twins, alone))
    percent = 100 / together.limb_darkened_mas[0]
    assert together.own_error_mas[0] * percent > like.common_percent
    assert apart.own_error_mas[0] * percent < 0.7 * like.common_percent


def test_saturated_bands_are_wrong_together():
    stars = photometry([consistent_star()], ["G2V"], av=0.0, errors=0.1)
    linked = np.where([[False, False, True, True, True]], 0.08, 0.0)
    loose = predict_diameters(stars, load_relations()).own_error_mas[0]
    assert (
        predict_diameters(replace(stars, linked_errors=linked), load_relations()).own_error_mas[0] > 1.1 * loose
    )


def test_nothing_applies_to_a_white_dwarf_or_a_single_band():
    rows = [{"B": 12.0, "V": 12.1, "Ks": 12.4}, {"V": 6.0}]
    result = predict_diameters(photometry(rows, ["DA3", "G2V"]), load_relations())
    assert np.isnan(result.limb_darkened_mas).all()
    assert result.relations_used(0) == []


def test_shapes_that_do_not_fit_are_refused():
    stars = photometry([consistent_star()], ["G2V"])
    with pytest.raises(ValueError, match=r"must have shape \(2, 5\)"):
        predict_diameters(replace(stars, spectral_types=["G2V", "K0V"]), load_relations())

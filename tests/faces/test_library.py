import pytest

import pinlight as pl
from pinlight.faces.diameter import predict_diameter
from pinlight.faces.setups import find_array
from pinlight.faces.targets import read_targets, resolve_target
from pinlight.resources import seed_folder


def test_three_lines_give_a_ranking(seeded_path):
    catalogue = pl.open_catalogue(str(seeded_path))
    ranking = pl.rank(catalogue, "tau Cet", array="north", mode="H")
    assert ranking.calibrators[0].calibration_error < 0.1
    catalogue.close()


def test_a_targets_own_columns_are_used(catalogue):
    target = pl.Target(150.0, 20.0, name="Winter Kiln", magnitudes={"H": 2.3})
    ranking = pl.rank(catalogue, target, array="north", mode="H", stations=["Ash", "Rowan"])
    assert ranking.target is target
    assert len(ranking.setup.baselines) == 1


def test_an_array_object_a_file_and_a_name_are_the_same(catalogue, north):
    path = seed_folder() / "arrays" / "north.toml"
    answers = [
        pl.rank(catalogue, "150 20", array=array, mode="K").to_dict()
        for array in (north, path, str(path), "north", "Quillstone")
    ]
    assert all(answer == answers[0] for answer in answers)


def test_the_best_set_of_a_size(catalogue):
    options = {"array": "north", "mode": "H", "night": "2026-12-01"}
    pair = pl.best_set(catalogue, "60 28", 2, **options)
    assert pair == pl.rank(catalogue, "60 28", **options).best_sets[1]
    with pytest.raises(pl.InputError, match="size is 7; it may be one of 1, 2, 3, 4"):
        pl.best_set(catalogue, "60 28", 7, **options)


def test_a_star_of_the_catalogue_brings_its_magnitudes(catalogue):
    target = resolve_target(catalogue, "τ Ceti")
    assert target.name == "tau Cet"
    assert target.magnitudes["V"] == 3.5
    assert target.star_id == catalogue.find("HD 10700")


def test_every_demo_target_has_at_least_five_calibrators(catalogue):
    targets = read_targets(seed_folder() / "targets.csv")
    assert len(targets) >= 8
    assert min(target.dec_deg for target in targets) < -40
    assert max(target.dec_deg for target in targets) > 40
    for target in targets:
        key = "north" if target.dec_deg > 5 else "south"
        assert len(pl.rank(catalogue, target, array=key, mode="H").calibrators) >= 5


@pytest.mark.parametrize(
    ("options", "message"),
    [
        ({}, "array is missing; give an array, or both baseline_m and wavelength_um"),
        ({"baseline_m": 100.0}, "wavelength_um is missing; give an array, or both"),
        ({"wavelength_um": 1.6}, "baseline_m is missing"),
        ({"array": "north", "mode": "H", "baseline_m": 100.0}, "array and baseline_m are both given"),
        ({"mode": "H", "baseline_m": 100.0, "wavelength_um": 1.6}, "mode is given without an array"),
        ({"array": "east"}, "array is 'east'; it may be one of north, south"),
        ({"array": "north"}, "mode is missing; Quillstone has H, K, red"),
        ({"array": "none.toml"}, "cannot read array file none.toml"),
    ],
)
def test_a_setup_that_does_not_fit_is_named(catalogue, options, message):
    with pytest.raises(pl.PinlightError, match=message):
        pl.rank(catalogue, "150 20", **options)


def test_a_name_that_is_neither_star_nor_place(catalogue):
    with pytest.raises(pl.NotFoundError, match="no star is named 'Nowhere Star'"):
        pl.rank(catalogue, "Nowhere Star", baseline_m=100.0, wavelength_um=1.65)


@pytest.mark.parametrize(
    ("text", "message"),
    [
        ("name,ra_deg,dec_deg\nA,10,95\n", "line 2: dec_deg is 95; it must lie between -90 and 90"),
        ("name,ra_deg,dec_deg\nA,10,\n", "line 2: dec_deg of A is missing"),
        ("name,ra_deg,dec_deg\nA,10,5\nB,ten,5\n", "line 3: ra_deg is 'ten'; it must be a number"),
        ("name,ra_deg,dec_deg,diameter_mas\nA,10,5,-1\n", "line 2: diameter_mas is -1; it must be positive"),
        ("name,ra_deg,dec_deg,V\nA,10,5,99\n", "line 2: V is 99; a magnitude lies between"),
        ("name,ra_deg,dec_deg,V\nA,10,5,nan\n", "line 2: V is nan"),
        ("who,where\nA,10\n", "has columns who, where; name missing"),
        ("", "has columns none; name missing"),
        ("name;ra_deg;dec_deg\nA;1;2\n", "commas part them"),
        ("name,ra_deg,dec_deg\n,,\n", "has no rows"),
        ("name,ra_deg,dec_deg,V,v\nA,1,2,3,4\n", "has the column V twice"),
        ('name,ra_deg,dec_deg\n\n"A\nB",1,x\n', "line 4: dec_deg is 'x'"),
        ("name,ra_deg,dec_deg,repeats\nA,1,2,1.5\n", "repeats is 1.5; it must be a whole number"),
        ("name,ra_deg,dec_deg,from\nA,1,2,soon\n", "from is 'soon'; write UTC as"),
        (
            "name,ra_deg,dec_deg,from,to\nA,1,2,2026-12-02T05:00,2026-12-01T20:00\n",
            "line 2: to of A is 2026-12-01T20:00:00Z; it must lie after from, 2026-12-02T05:00:00Z",
        ),
        ("name,ra_deg,dec_deg,priorty\nA,1,2,2\n", "has the column priorty; is it priority?"),
    ],
)
def test_a_wrong_targets_file_is_told_its_line(tmp_path, text, message):
    path = tmp_path / "targets.csv"
    path.write_text(text, encoding="utf-8")
    with pytest.raises(pl.InputError, match=message):
        read_targets(path)


def test_an_unreadable_targets_file_is_named(tmp_path):
    with pytest.raises(pl.InputError, match=r"cannot read targets file .*none.csv: No such file"):
        read_targets(tmp_path / "none.csv")


def test_a_diameter_from_magnitudes():
    # A red clump giant of Gallenne et al. (2018), A&A 616, A68: HD 62713, 1.446 +- 0.010 mas.
    answer = predict_diameter({"V": 5.134, "Ks": 2.654}, {"V": 0.01, "Ks": 0.01}, spectral_type="K1III")
    diameter = answer["diameter"]
    assert diameter["limb_darkened_mas"] == pytest.approx(1.446, rel=0.02)
    assert 0.005 < diameter["error_mas"] / diameter["limb_darkened_mas"] < 0.015
    assert diameter["uniform_disk_mas"] < diameter["limb_darkened_mas"]
    assert diameter["relations"] == [
        "A18_giant_VK",
        "P19_VK",
        "N02_VK",
        "DB05_VK",
    ]
    assert set(diameter) == {
        "limb_darkened_mas", "uniform_disk_mas", "band", "own_error_mas", "shared_error_mas", "error_mas",
        "relations", "discordant",
    }  # fmt: skip


def test_an_extinction_map_of_ones_own_is_asked():
    asked = []

    def dust(ra_deg, dec_deg, parallax_mas):
        asked.append((ra_deg, dec_deg, parallax_mas))
        return 0.4, 0.1

    options = {"spectral_type": "K1III", "position_deg": (80.0, 10.0), "parallax_mas": 4.0}
    mapped = predict_diameter({"V": 5.6, "Ks": 2.95}, extinction_map=dust, **options)
    given = predict_diameter({"V": 5.6, "Ks": 2.95}, av_mag=0.4, av_error_mag=0.1, **options)
    assert asked == [(80.0, 10.0, 4.0)]
    assert mapped == given
    assert (mapped["av_mag"], mapped["av_error_mag"]) == (0.4, 0.1)
    surer = predict_diameter({"V": 5.6, "Ks": 2.95}, av_mag=0.4, av_error_mag=0.01, **options)
    assert surer["diameter"]["own_error_mas"] < given["diameter"]["own_error_mas"]


@pytest.mark.parametrize(
    ("magnitudes", "options", "message"),
    [
        ({"V": 5.0}, {}, "1 magnitude is given; a colour takes at least two bands"),
        ({"V": 99.0, "Ks": 3.0}, {}, "V is 99; a magnitude lies between -5 and 30"),
        ({"V": 5.0, "Ks": float("nan")}, {}, "Ks is nan"),
        ({"V": 5.0, "Ks": 3.0}, {"errors": {"V": -0.1}}, "V_error is -0.1; it must be positive"),
        ({"V": 5.0, "Ks": 3.0}, {"errors": {"H": 0.1}}, "H_error is given without H"),
        ({"V": 5.0, "Ks": 3.0}, {"parallax_mas": -3.0}, "parallax_mas is -3; it must lie between 0 and 1000"),
        ({"V": 5.0, "Ks": 3.0}, {"av_mag": -1.0}, "av_mag is -1"),
        ({"V": 5.0, "Ks": 3.0}, {"position_deg": (10.0, 95.0)}, "dec_deg is 95"),
        ({"V": 5.0, "Ks": 3.0}, {"band": "Q"}, "band is 'Q'"),
        ({"V": 3.0, "Ks": 5.0}, {"spectral_type": "G2V"}, "no star is so blue: are the two swapped"),
        ({"V": 9.0, "Ks": 5.0}, {"spectral_type": "G2V"}, "no published relation applies to a dwarf"),
        (
            {"V": 5.0, "Ks": 3.0},
            {"spectral_type": "DA3"},
            "no published relation applies to a star of this type",
        ),
        ({"V": 5.0, "W1": 4.0}, {}, "band is 'W1'; it may be one of B, V, J"),
    ],
)
def test_impossible_magnitudes_get_a_reason_not_a_number(magnitudes, options, message):
    with pytest.raises(pl.InputError, match=message):
        predict_diameter(magnitudes, **options)


def test_find_array_tells_files_from_names(tmp_path):
    assert find_array("south").name == "Ember Pan"
    with pytest.raises(pl.InputError, match="cannot read array file"):
        find_array(tmp_path / "x")


def test_the_public_names_are_there():
    for name in pl.__all__:
        assert getattr(pl, name) is not None
    assert set(dir(pl)) == set(pl.__all__)
    with pytest.raises(AttributeError, match="no attribute 'plan_everything'"):
        _ = pl.plan_everything

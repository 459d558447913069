import re
from collections import Counter

import numpy as np
import pytest
from astropy.table import Table

from pinlight.catalogue.seed import OBJECT_TYPES, _flags, read_seed
from pinlight.errors import SeedFileError
from pinlight.photometry.systems import CATALOGUE_BANDS
from pinlight.ranking.columns import FLAGS
from pinlight.resources import seed_folder

README = (seed_folder() / "README.md").read_text(encoding="utf-8")


@pytest.fixture(scope="module")
def seed():
    return read_seed()


def count_of(words: str) -> int:
    """A count that the seed's README states in a table row."""
    match = re.search(rf"^\| {re.escape(words)} \| ([\d ]+) \|", README, re.MULTILINE)
    assert match, f"README has no row {words!r}"
    return int(match[1].replace(" ", ""))


def test_counts_are_those_of_the_readme(seed):
    assert len(seed.names) == count_of("stars")
    finite = np.isfinite(seed.magnitudes)
    for index, band in enumerate(CATALOGUE_BANDS):
        assert finite[:, index].sum() == count_of(f"with {band}")
    assert finite.all(axis=1).sum() == count_of("with all five")
    assert sum(bool(kind) for kind in seed.spectral_types) == count_of("with a spectral type")
    assert np.isfinite(seed.parallax_mas).sum() == count_of("with a parallax")
    assert np.isfinite(seed.pm_ra_mas_yr).sum() == count_of("with a proper motion")
    assert np.isfinite(seed.radial_velocity_km_s).sum() == count_of("with a radial velocity")
    prefixes = Counter(name.split(" ")[0] for names in seed.identifiers for name in names)
    assert prefixes["HIP"] == count_of("with a HIP number")
    assert prefixes["HD"] == count_of("with an HD number")


def test_the_seed_is_real_nearby_and_small(seed):
    assert 70_000 < len(seed.names) < 80_000
    assert (seed.parallax_mas > 1000 / 300).all()
    assert (seed_folder() / "stars.fits.gz").stat().st_size < 8_000_000


@pytest.mark.parametrize(
    ("hip", "ra_deg", "dec_deg", "v_mag", "parallax_mas"),
    [
        # van Leeuwen (2007), Hipparcos: the New Reduction, I/311, J2000; V of the Astronomical Almanac.
        (8102, 26.01701, -15.93748, 3.50, 273.96),
        (96895, 295.45397, 50.52506, 5.96, 47.44),
        (57757, 177.67383, 1.76472, 3.61, 91.50),
        (113357, 344.36658, 20.76883, 5.45, 64.07),
    ],
)
def test_stars_stand_where_hipparcos_saw_them(seed, hip, ra_deg, dec_deg, v_mag, parallax_mas):
    row = next(i for i, names in enumerate(seed.identifiers) if f"HIP {hip}" in names)
    assert seed.ra_deg[row] == pytest.approx(ra_deg, abs=2e-5)
    assert seed.dec_deg[row] == pytest.approx(dec_deg, abs=2e-5)
    assert seed.magnitudes[row, CATALOGUE_BANDS.index("V")] == pytest.approx(v_mag, abs=0.02)
    assert seed.parallax_mas[row] == pytest.approx(parallax_mas, rel=0.01)


def test_hip_and_hd_numbers_belong_together(seed):
    # Pairs of the measured stars in tests/data, from Hipparcos (ESA SP-1200).
    pairs = {8102: 10700, 57757: 102870, 96895: 186408, 91949: 173701, 6379: 7924}
    for hip, hd in pairs.items():
        names = next(names for names in seed.identifiers if f"HIP {hip}" in names)
        assert f"HD {hd}" in names


def test_every_object_type_is_told_and_every_flag_known(seed):
    assert set(seed.object_types) <= set(OBJECT_TYPES)
    assert {word for words in OBJECT_TYPES.values() for word in words.split()} <= set(FLAGS)
    assert len(FLAGS) == len(set(FLAGS)) <= 64


def test_the_numbers_of_binaries_and_variables_are_the_sources(seed):
    kinds = Counter(seed.object_types)
    for kind, words in (
        ("**", "double stars (`**`)"),
        ("SB*", "spectroscopic binaries (`SB*`)"),
        ("V*", "variables (`V*`)"),
    ):
        assert kinds[kind] == count_of(words)


@pytest.mark.parametrize(
    ("kind", "spectral_type", "names", "words"),
    [
        ("*", "B6Vep", ["HD 1"], "emission_line peculiar"),
        ("Be*", "B2V", ["HD 1"], "emission_line be_star fast_rotator"),
        ("*", "A1Vn", ["HD 1"], "fast_rotator"),
        ("*", "G8III+G0III", ["HD 1"], "composite_spectrum"),
        ("*", "G4III", ["V446 And", "HD 1"], "variable"),
        ("*", "G4III", ["R Lyr"], "variable"),
        ("*", "G4III", ["A Cen"], ""),
        ("WD*", "DA3", ["GJ 1"], "white_dwarf"),
        ("RS*", "K1IV", ["HD 1"], "active_binary variable"),
    ],
)
def test_types_and_names_become_flags(kind, spectral_type, names, words):
    assert _flags(kind, spectral_type, names) == words


def test_a_seed_with_a_wrong_row_is_refused_and_named(tmp_path):
    table = Table.read(seed_folder() / "stars.fits.gz")[:3]
    table["object_type"][1] = "XX"
    wrong = tmp_path / "wrong.fits"
    table.write(wrong)
    with pytest.raises(SeedFileError, match=r"wrong.fits row 2: object_type is 'XX'"):
        read_seed(wrong)
    table["object_type"][1] = "*"
    table["dec_deg"][2] = 95.0
    table.write(wrong, overwrite=True)
    with pytest.raises(SeedFileError, match=r"row 3: position .* 95 is not on the sky"):
        read_seed(wrong)
    wrong.write_bytes(b"not a table")
    with pytest.raises(SeedFileError, match="cannot read seed file"):
        read_seed(wrong)
    with pytest.raises(SeedFileError, match="cannot read seed file"):
        read_seed(tmp_path / "none.fits")

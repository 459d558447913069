"""Makes stars.fits.gz, the real stars that ship with Pinlight; README.md beside it tells from what.

    python make_stars.py --stars-mat SIMBAD300.mat --hipparcos stars.14.json --names starnames.json

Needs numpy, scipy and astropy. The result is the same bytes for the same input.
"""

import argparse
import gzip
import io
import json
import re
from collections import Counter
from pathlib import Path

import numpy as np
from astropy import units
from astropy.coordinates import SkyCoord
from astropy.io import fits
from scipy.io import loadmat

NOT_STARS = {"Sy1", "Sy2", "Sy*", "G", "PaG", "IR", "err", "Psr", "Pl?", "Lev", "PN", "mul", "Cl*", "N*?"}
NAKED_EYE_V_MAG = 6.5
BANDS = {"B": "BMAG", "V": "VMAG", "J": "JMAG", "H": "HMAG", "Ks": "KMAG"}
# The two name files round positions to 0.0001 deg (0.4 arcsec); 3 arcsec leaves room for
# the photocentres of doubles, 0.7 mag for combined against single magnitudes.
MATCH_ARCSEC = 3.0
MATCH_MAG = 0.7

GREEK = dict(
    zip(
        "αβγδεζηθικλμνξοπρστυφχψω",
        "alpha beta gamma delta epsilon zeta eta theta iota kappa lambda mu nu xi omicron pi "
        "rho sigma tau upsilon phi chi psi omega".split(),
        strict=True,
    )
)
SHORT_GREEK = {
    **{word[:3]: word for word in GREEK.values()},
    **{"alf": "alpha", "ksi": "xi", "tet": "theta", "mu.": "mu", "nu.": "nu", "pi.": "pi"},
    **{"mu": "mu", "nu": "nu", "xi": "xi", "pi": "pi"},
}


def plain_name(name: str) -> str:
    """The source's name without its type prefix, Greek letters written out."""
    name = re.sub(r"^(\*\*?|V\*) +", "", re.sub(r"^NAME +", "", name)).strip()
    letter, _, rest = name.partition(" ")
    match = re.fullmatch(r"([a-z]+\.?)0*(\d*)", letter)
    if match and match[1] in SHORT_GREEK and re.match(r"[A-Z][A-Za-z]{2}\b", rest):
        return f"{SHORT_GREEK[match[1]]}{match[2]} {rest}"
    if name.isupper() and re.fullmatch(r"[A-Z' ]{5,}", name):
        return name.title()
    return name


def read_stars(path: Path) -> dict[str, np.ndarray]:
    source = loadmat(path, squeeze_me=True, struct_as_record=False)["S"]

    def texts(field: str) -> np.ndarray:
        return np.array([str(x).strip() for x in getattr(source, field)])

    def numbers(field: str) -> np.ndarray:
        return np.asarray(getattr(source, field), dtype=float)

    columns = {
        "name": texts("NAME"),
        "object_type": texts("TYPE"),
        "spectral_type": np.where(texts("SPEC") == "~", "", texts("SPEC")),
        "ra_deg": numbers("RADEG"),
        "dec_deg": numbers("DECDEG"),
        "pm_ra_mas_yr": numbers("PMRA"),
        "pm_dec_mas_yr": numbers("PMDEC"),
        "parallax_mas": numbers("PARX"),
        # The source writes 0 where the velocity is unknown (48 452 stars).
        "radial_velocity_km_s": np.where(numbers("RV") == 0, np.nan, numbers("RV")),
    }
    columns |= {band: numbers(field) for band, field in BANDS.items()}
    return columns


def choose(stars: dict[str, np.ndarray]) -> dict[str, np.ndarray]:
    """Real stars with a place, a V magnitude, and an infrared one or naked-eye brightness."""
    placed = np.isfinite(stars["ra_deg"]) & np.isfinite(stars["dec_deg"])
    a_star = ~np.isin(stars["object_type"], sorted(NOT_STARS))
    visual = np.isfinite(stars["V"])
    infrared = np.isfinite([stars["J"], stars["H"], stars["Ks"]]).any(axis=0)
    seen = infrared | (stars["V"] <= NAKED_EYE_V_MAG)
    keep = placed & a_star & visual & seen
    print(f"read {placed.size}")
    print(f"left out, no position: {(~placed).sum()}")
    print(f"left out, not a star: {Counter(stars['object_type'][placed & ~a_star])}")
    print(f"left out, no V: {(placed & a_star & ~visual).sum()}")
    print(f"left out, no J, H, Ks and V > {NAKED_EYE_V_MAG}: {(placed & a_star & visual & ~seen).sum()}")
    print(f"kept without J, H and Ks: {(keep & ~infrared).sum()}")
    return {name: column[keep] for name, column in stars.items()}


def hipparcos_numbers(stars: dict[str, np.ndarray], path: Path) -> dict[int, int]:
    """Row -> HIP number, each number to the one star nearest in place, then in brightness."""
    features = json.loads(path.read_text(encoding="utf-8"))["features"]
    numbers = np.array([feature["id"] for feature in features])
    v_mags = np.array([float(feature["properties"]["mag"]) for feature in features])
    lon, lat = np.array([feature["geometry"]["coordinates"] for feature in features]).T
    hipparcos = SkyCoord(lon % 360, lat, unit="deg")
    places = SkyCoord(stars["ra_deg"], stars["dec_deg"], unit="deg")
    near = hipparcos.search_around_sky(places, MATCH_ARCSEC * units.arcsec)
    pairs = [
        (round(distance.arcsec, 1), abs(stars["V"][row] - v_mags[entry]), int(row), int(entry))
        for row, entry, distance in zip(near[0], near[1], near[2], strict=True)
        if abs(stars["V"][row] - v_mags[entry]) < MATCH_MAG
    ]
    found: dict[int, int] = {}
    taken: set[int] = set()
    for row, name in enumerate(stars["name"]):  # the source's own word comes first
        if match := re.fullmatch(r"HIP (\d+)", name):
            found[row] = int(match[1])
            taken.add(int(match[1]))
    for _, _, row, entry in sorted(pairs):
        number = int(numbers[entry])
        if row not in found and number not in taken:
            found[row] = number
            taken.add(number)
    return found


def other_names(entry: dict[str, str]) -> list[str]:
    """Bayer, Flamsteed, variable, HD, Gliese and proper names, as the trade writes them."""
    constellation = entry.get("c", "")
    names = []
    if entry.get("bayer") and constellation:
        letter = re.sub("[α-ω]", lambda match: GREEK[match[0].replace("ς", "σ")], entry["bayer"])
        names.append(f"{letter} {constellation}")
    if entry.get("flam") and constellation:
        names.append(f"{entry['flam']} {constellation}")
    if entry.get("var") and constellation:
        names.append(f"{re.sub('^V0+', 'V', entry['var'])} {constellation}")
    names += [entry[key] for key in ("hd", "gl", "name") if entry.get(key)]
    plain = [re.sub(r"\s+", " ", name.replace("\u2009", " ")).strip() for name in names]
    return [name.replace("’", "'") for name in plain if name.replace("’", "'").isascii()]


def all_identifiers(
    stars: dict[str, np.ndarray], numbers: dict[int, int], path: Path
) -> tuple[list[str], list[str]]:
    """The name to show, which is one star's alone, and all identifiers, joined by '|'."""
    entries = json.loads(path.read_text(encoding="utf-8"))
    lists: list[list[str]] = []
    taken = {plain_name(name) for name in stars["name"]}
    for row, source_name in enumerate(stars["name"]):
        own = plain_name(source_name)
        names = []
        if row in numbers:
            names = [n for n in other_names(entries.get(str(numbers[row]), {})) if n not in taken]
            names.append(f"HIP {numbers[row]}")
        names = list(dict.fromkeys([*names, own]))
        order = [r"[a-z]+\d* [A-Z][A-Za-z]{2}", r"[A-Za-z]\d? [A-Z][A-Za-z]{2}", r"\d+ [A-Z][A-Za-z]{2}"]
        order += [r"HD \d+\w?", r"HR \d+\w?", r"HIP \d+\w?", r"GJ [\d.]+\w*", ".*"]
        ranked = sorted(names, key=lambda n: next(i for i, p in enumerate(order) if re.fullmatch(p, n)))
        lists.append(ranked)
    bearers = Counter(name for names in lists for name in names)
    shown = [next((n for n in names if bearers[n] == 1), names[0]) for names in lists]
    return shown, ["|".join(names) for names in lists]


def write(stars: dict[str, np.ndarray], path: Path) -> None:
    unit = {
        "ra_deg": "deg",
        "dec_deg": "deg",
        "pm_ra_mas_yr": "mas/yr",
        "pm_dec_mas_yr": "mas/yr",
        "parallax_mas": "mas",
        "radial_velocity_km_s": "km/s",
        **dict.fromkeys(BANDS, "mag"),
    }
    columns = []
    for name, values in stars.items():
        if values.dtype.kind == "U":
            encoded = np.char.encode(values, "ascii")
            columns.append(fits.Column(name, f"{encoded.dtype.itemsize}A", array=encoded))
        else:
            kind = "D" if name in ("ra_deg", "dec_deg") else "E"
            columns.append(fits.Column(name, kind, unit=unit[name], array=values))
    table = fits.BinTableHDU.from_columns(columns, name="STARS")
    table.header["RADESYS"] = "ICRS"
    table.header["EPOCH"] = (2000.0, "epoch of the positions, Julian year")
    buffer = io.BytesIO()
    fits.HDUList([fits.PrimaryHDU(), table]).writeto(buffer)
    with path.open("wb") as file, gzip.GzipFile("", "wb", 9, file, mtime=0) as packed:
        packed.write(buffer.getvalue())


def main() -> None:
    parser = argparse.ArgumentParser(description=__doc__.splitlines()[0])
    parser.add_argument("--stars-mat", type=Path, required=True)
    parser.add_argument("--hipparcos", type=Path, required=True)
    parser.add_argument("--names", type=Path, required=True)
    parser.add_argument("--output", type=Path, default=Path(__file__).with_name("stars.fits.gz"))
    arguments = parser.parse_args()
    stars = choose(read_stars(arguments.stars_mat))
    numbers = hipparcos_numbers(stars, arguments.hipparcos)
    shown, joined = all_identifiers(stars, numbers, arguments.names)
    own = np.array([plain_name(name) for name in stars["name"]])
    stars = {"name": np.array(shown), "source_name": own, "identifiers": np.array(joined)} | {
        name: column for name, column in stars.items() if name != "name"
    }
    order = np.lexsort([stars["dec_deg"], stars["ra_deg"]])
    write({name: column[order] for name, column in stars.items()}, arguments.output)
    kinds = Counter(name.split(" ")[0] for names in joined for name in names.split("|"))
    print(f"wrote {len(order)} stars, {arguments.output.stat().st_size} bytes")
    for band in BANDS:
        print(f"with {band}: {np.isfinite(stars[band]).sum()}")
    print(f"with all five bands: {np.isfinite([stars[band] for band in BANDS]).all(axis=0).sum()}")
    print(f"with HIP: {kinds['HIP']}, HD: {kinds['HD']}, spectral type: {(stars['spectral_type'] != '').sum()}")
    for name in ("pm_ra_mas_yr", "radial_velocity_km_s", "parallax_mas"):
        print(f"with {name}: {np.isfinite(stars[name]).sum()}")


if __name__ == "__main__":
    main()

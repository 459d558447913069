"""A few invented stars for ranking, as an edition's columns."""

from dataclasses import replace

import numpy as np

from pinlight.ranking.columns import StarColumns, flag_bits
from pinlight.sky.cells import CELL_COUNT, cell_centres, cells_of


def columns(stars: list[dict]) -> StarColumns:
    """Columns of stars given by what is special about each; the rest is a quiet K0 dwarf."""
    plain = {
        "ra_deg": 100.0, "dec_deg": 20.0, "V": 6.0, "H": 4.3, "Ks": 4.2, "theta": 0.5, "own": 0.008,
        "shared": 0.004, "flags": "", "oblateness": 0.0, "u": 0.3,
    }  # fmt: skip
    filled = [plain | star for star in stars]
    cells = cells_of([s["ra_deg"] for s in filled], [s["dec_deg"] for s in filled])
    order = np.argsort(cells, kind="stable")
    filled = [filled[i] | {"id": int(i) + 1} for i in order]

    def floats(key: str) -> np.ndarray:
        return np.array([s[key] for s in filled], dtype=np.float32)

    nothing = np.empty(0, dtype=np.float32)
    made = StarColumns(
        edition="invented",
        ids=np.array([s["id"] for s in filled]),
        names=np.array([f"star {s['id']}".encode() for s in filled], dtype="S20"),
        spectral_types=np.array([b"K0V"] * len(filled), dtype="S8"),
        ra_deg=np.array([s["ra_deg"] for s in filled]),
        dec_deg=np.array([s["dec_deg"] for s in filled]),
        pm_ra_mas_yr=np.zeros(len(filled), np.float32),
        pm_dec_mas_yr=np.zeros(len(filled), np.float32),
        parallax_mas=np.full(len(filled), 20, np.float32),
        radial_velocity_km_s=np.zeros(len(filled), np.float32),
        flags=np.array([flag_bits(s["flags"]) for s in filled], dtype=np.uint64),
        magnitudes={band: floats(band) for band in ("V", "H", "Ks")},
        magnitude_errors={band: np.full(len(filled), 0.02, np.float32) for band in ("V", "H", "Ks")},
        diameter_mas=floats("theta"),
        own_error_mas=floats("own"),
        shared_error_mas=floats("shared"),
        limb_darkening=np.repeat(floats("u")[:, None], 8, axis=1),
        relations_used=np.ones(len(filled), dtype=np.uint64),
        relation_names=("K04_VK",),
        oblateness=floats("oblateness"),
        companion_rows=np.empty(0, dtype=np.int64),
        companion_separations_arcsec=nothing,
        companion_deltas_mag={"V": nothing, "Ks": nothing},
        cell_starts=np.searchsorted(cells[order], np.arange(CELL_COUNT + 1)),
        cell_centres=cell_centres(),
    )
    row_of = {s["id"]: row for row, s in enumerate(filled)}
    companions = sorted(
        (row_of[index + 1], arcsec, *deltas)
        for index, star in enumerate(stars)
        for arcsec, *deltas in star.get("companions", [])
    )
    if companions:
        rows, arcsecs, by_v, by_ks = (np.array(values) for values in zip(*companions, strict=True))
        made = replace(
            made,
            companion_rows=rows,
            companion_separations_arcsec=arcsecs.astype(np.float32),
            companion_deltas_mag={"V": by_v.astype(np.float32), "Ks": by_ks.astype(np.float32)},
        )
    return made

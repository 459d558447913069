"""A million diameters in a process of its own: how long, and how much memory. `python -m tests.bench.diameters`

Its peer is a loop over stars that does the same by the same formulas, each star on its own.
"""

import json
import resource
import sys
import time
from typing import Any

import numpy as np

from pinlight.catalogue.seed import read_seed
from pinlight.diameters.combination import RelationArrays
from pinlight.diameters.prediction import StarPhotometry, predict_diameters
from pinlight.diameters.relations import load_relations
from pinlight.diameters.spectral import parse_spectral_type
from pinlight.photometry.extinction import relative_extinction
from pinlight.photometry.systems import CATALOGUE_BANDS, SYSTEM_BANDS, to_systems
from pinlight.sky.positions import galactic_latitude_deg


def table(count: int) -> StarPhotometry:
    """The seed's stars with all five bands, repeated until there are so many."""
    seed = read_seed()
    rows = np.resize(np.flatnonzero(np.isfinite(seed.magnitudes).all(axis=1)), count)
    latitude = galactic_latitude_deg(seed.ra_deg, seed.dec_deg)
    return StarPhotometry.of(
        CATALOGUE_BANDS,
        seed.magnitudes[rows],
        np.full((count, len(CATALOGUE_BANDS)), np.nan),
        [seed.spectral_types[row] for row in rows],
        seed.parallax_mas[rows],
        latitude[rows],
    )


def by_loop(stars: StarPhotometry, group: Any, av: Any, av_error: Any, rows: range) -> list[float]:
    """Diameters of dwarfs, giants and the rest one by one; groups and extinctions are given."""
    relations = load_relations().relations
    arrays = RelationArrays.of(relations)
    random, systematic = arrays.random, arrays.systematic
    extinction = np.array([relative_extinction(band) for band in CATALOGUE_BANDS])
    diameters = []
    for row in rows:
        spectral = parse_spectral_type(stars.spectral_types[row])
        systems = to_systems(CATALOGUE_BANDS, (stars.magnitudes[row] - av[row] * extinction)[None])
        magnitude, response = systems.values[0], systems.by_input
        y, gradient, chosen = [], [], []
        for index, relation in enumerate(relations):
            if group[row] not in relation.luminosity or spectral.code > relation.luminosity[group[row]]:
                continue
            if not relation.spectral_min <= spectral.code <= relation.spectral_max:
                continue
            zero, bluer, redder = arrays.zero[index], arrays.bluer[index], arrays.redder[index]
            colour = magnitude[bluer] - magnitude[redder]
            if not relation.colour_min <= colour <= relation.colour_max:
                continue
            slope = float(relation.slope(colour))
            effect = np.zeros(len(SYSTEM_BANDS))
            effect[zero] -= 0.2
            effect[bluer] += slope
            effect[redder] -= slope
            y.append(float(relation.log_diameter(magnitude[zero], colour)))
            gradient.append(effect)
            chosen.append(index)
        if not chosen:
            diameters.append(np.nan)
            continue
        effects = np.array(gradient)
        by_magnitude, by_scatter = effects @ response, effects @ systems.by_scatter
        linked, shared = stars.linked_errors[row], stars.shared_errors[row]
        alone = np.sqrt(np.maximum(stars.errors[row] ** 2 - linked**2, 0))
        loads = np.column_stack(
            [
                by_magnitude * alone, by_magnitude @ linked, by_magnitude @ shared, by_scatter,
                by_magnitude @ extinction * av_error[row],
            ]
        )  # fmt: skip
        square = np.ix_(chosen, chosen)
        weights = np.linalg.inv(loads @ loads.T + random[square] + systematic[square]).sum(axis=1)
        diameters.append(float(10 ** (weights @ np.array(y) / weights.sum())))
    return diameters


def main() -> None:
    count, sample = int(sys.argv[1]) if len(sys.argv) > 1 else 1_000_000, 2000
    stars, relation_set = table(count), load_relations()
    start = time.perf_counter()
    found = predict_diameters(stars, relation_set)
    seconds = time.perf_counter() - start
    peak_gb = resource.getrusage(resource.RUSAGE_SELF).ru_maxrss * 1024 / 1e9
    group = found.luminosity_group[:sample]
    start = time.perf_counter()
    one_by_one = by_loop(stars, group, found.av_mag, found.av_error_mag, range(sample))
    loop_s = (time.perf_counter() - start) * count / sample
    stated = np.array([not np.isnan(parse_spectral_type(t).code) for t in stars.spectral_types[:sample]])
    stated &= found.bluest[:sample] < 0
    np.testing.assert_allclose(
        np.array(one_by_one)[stated], found.limb_darkened_mas[:sample][stated], rtol=1e-6
    )
    print(json.dumps({"stars": count, "seconds": seconds, "peak_gb": peak_gb, "loop_seconds": loop_s}))


if __name__ == "__main__":
    main()

"""Speed of the main jobs beside their peers; medians, in one run. `python -m tests.bench`"""

import json
import os
import statistics
import subprocess
import sys
import tempfile
import time
from collections.abc import Callable
from pathlib import Path
from typing import Any

import numpy as np

from pinlight.catalogue.making import make_catalogue
from pinlight.faces.setups import known_arrays
from pinlight.planning.night import Request, plan_night
from pinlight.ranking.clock import night_clock
from pinlight.ranking.rank import rank
from pinlight.ranking.setup import setup_of
from pinlight.ranking.target import Target
from tests.bench.page import measure_page


def median_s(call: Callable[[], Any], repeats: int = 7) -> float:
    times = []
    for _ in range(repeats):
        start = time.perf_counter()
        call()
        times.append(time.perf_counter() - start)
    return statistics.median(times)


def command_s(*arguments: str, repeats: int = 5, **environment: str) -> float:
    program = [sys.executable, "-c", "from pinlight.faces.cli import main; main()", *arguments]
    settings = os.environ | environment

    def call() -> None:
        subprocess.run(program, check=True, stdout=subprocess.DEVNULL, stderr=subprocess.DEVNULL, env=settings)

    return median_s(call, repeats)


def show(what: str, seconds: float, peer: str = "", peer_s: float = 0.0) -> None:
    beside = f"   {peer}: {1000 * peer_s:9.1f} ms, ratio {peer_s / seconds:6.1f}" if peer else ""
    print(f"{what:<44}{1000 * seconds:9.1f} ms{beside}", flush=True)


def main() -> None:
    folder = Path(tempfile.mkdtemp())
    path = str(folder / "bench.db")
    show("make the catalogue of the seed (once)", median_s(lambda: make_catalogue(path), 1))
    catalogue = make_catalogue(path)
    columns = catalogue.columns()
    setup = setup_of(known_arrays()["north"], None, "H")
    target = Target(151.6, 18.3, magnitudes={"H": 2.3})

    from astropy import units
    from astropy.coordinates import AltAz, EarthLocation, SkyCoord
    from astropy.time import Time
    from astropy.utils import iers

    sky = SkyCoord(np.array(columns.ra_deg), np.array(columns.dec_deg), unit="deg")
    centre = SkyCoord(target.ra_deg, target.dec_deg, unit="deg")

    def by_astropy() -> Any:
        return np.flatnonzero(sky.separation(centre) < 15 * units.deg)

    show(
        "stars of a 15 deg field",
        median_s(lambda: columns.cone(target.ra_deg, target.dec_deg, 15.0), 50),
        "astropy separations",
        median_s(by_astropy),
    )
    show("rank one target, 15 baselines, 5 channels", median_s(lambda: rank(columns, target, setup), 20))

    array = known_arrays()["north"]
    clock = night_clock(array, array.station, "2026-12-01")
    rows, _ = columns.cone(target.ra_deg, target.dec_deg, 15.0)
    field = SkyCoord(np.array(columns.ra_deg[rows]), np.array(columns.dec_deg[rows]), unit="deg")
    iers.conf.auto_download, iers.conf.auto_max_age = False, None
    site = EarthLocation(
        array.longitude_deg * units.deg, array.latitude_deg * units.deg, array.height_m * units.m
    )
    frame = AltAz(obstime=Time(clock.times, format="mjd", scale="tai"), location=site, pressure=0 * units.hPa)

    def places() -> Any:
        ra, dec = clock.apparent(columns.ra_deg[rows], columns.dec_deg[rows])
        return clock.above(ra[:, None], dec[:, None], clock.times)

    show(
        f"altitudes of {len(rows)} stars at {len(clock.times)} times",
        median_s(places),
        "astropy AltAz",
        median_s(lambda: field[:, None].transform_to(frame).alt.deg > 30, 3),
    )

    def with_clock() -> Any:
        return rank(columns, target, setup, clock=night_clock(array, array.station, "2026-12-01"))

    show("rank one target for a night, clock included", median_s(with_clock, 20))
    random = np.random.default_rng(3)
    wanted = [
        Request(Target(float(ra % 360), float(dec), name=f"T{i}", magnitudes={"H": 4.0}), float(1 + i % 3))
        for i, (ra, dec) in enumerate(zip(random.uniform(330, 510, 30), random.uniform(5, 70, 30), strict=True))
    ]
    limit_s = 5.0
    show(
        f"plan a night of 30 targets, solver limit {limit_s:g} s",
        median_s(lambda: plan_night(columns, wanted, setup, clock, time_limit_s=limit_s), 3),
    )

    program = [sys.executable, "-m", "tests.bench.diameters"]
    runs = [json.loads(subprocess.run(program, check=True, capture_output=True).stdout) for _ in range(3)]
    middle = sorted(runs, key=lambda run: run["seconds"])[1]
    show(
        f"diameters of a million stars, {middle['peak_gb']:.2f} GB",
        middle["seconds"],
        "star by star",
        middle["loop_seconds"],
    )
    measure_page(catalogue)
    show("pinlight --help (process)", command_s("--help"))
    show(
        "pinlight rank (process)",
        command_s("rank", "tau Cet", "--array", "north", "--mode", "H", PINLIGHT_DB=path),
    )
    show(
        "pinlight demo --once --json, first (process)",
        command_s("demo", "--once", "--json", repeats=1, PINLIGHT_DB=str(folder / "demo.db")),
    )
    show(
        "pinlight demo --once --json, again (process)",
        command_s("demo", "--once", "--json", PINLIGHT_DB=str(folder / "demo.db")),
    )


if __name__ == "__main__":
    main()

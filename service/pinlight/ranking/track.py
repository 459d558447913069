"""A star's track over an array: where it stands, its baselines, and what keeps it out of reach."""

from typing import Any

import numpy as np

from pinlight.arrays.reach import TOLERANCE_M, coarse_paths_m
from pinlight.ranking.clock import Clock
from pinlight.ranking.reach import reach_of_target
from pinlight.ranking.result import windows_json
from pinlight.ranking.target import Target
from pinlight.sky.places import altitude_azimuth_deg
from pinlight.sky.time import format_utc

__all__ = ["track"]


def track(clock: Clock, target: Target, step_min: float) -> dict[str, Any]:
    """A clock's span in steps, ready for JSON.

    Raises
    ------
    InputError
        If the step is impossible.

    Returns
    -------
    answer : dict
        ``times`` with altitude, azimuth, hour angle, u, v, w and projected length of every baseline,
        whether the target is in reach and what blocks it; ``windows``; and ``coarse_paths_m``, the
        coarse setting that gives the longest window, which reach is judged by; without any window
        reach is judged by all of them.
    """
    reach = reach_of_target(clock, target)
    ra, dec = reach.place
    moments = clock.every(step_min)
    hours = clock.hour_angle_deg(ra, moments)
    altitude, azimuth = altitude_azimuth_deg(hours, dec, clock.site.latitude_deg)
    uvw = clock.uvw_m(ra, dec, moments)
    names = [station.name for station in clock.stations]
    pairs = [(names[i], names[j]) for i, j in clock.delay_lines.pairs]
    limits = clock.array.limits
    dark, clear = clock.dark(moments), clock.moon_clear(ra, dec, moments)
    horizons = {station.name: clock.horizon_deg(station, azimuth) for station in clock.stations}
    delays = clock.delays_m(ra, dec, moments)
    lacking, served = np.zeros_like(delays), np.ones(len(moments), dtype=bool)
    if reach.settings is not None:
        lacking = clock.delay_lines.lacking_m(reach.settings, delays)
    else:
        _, served = clock.delay_lines.settings_for(delays, delays)
    times = []
    for index, when in enumerate(moments):
        blocked = []
        if not dark[index]:
            blocked.append("sun")
        if altitude[index] < limits.altitude_min_deg:
            blocked.append("altitude")
        blocked += [
            f"horizon of {name}" for name, heights in horizons.items() if altitude[index] < heights[index]
        ]
        if not clear[index]:
            blocked.append("moon")
        blocked += [
            f"delay lines of {one} and {other} by {short:.1f} m"
            for (one, other), short in zip(pairs, lacking[:, index], strict=True)
            if short > TOLERANCE_M
        ]
        if not served[index]:
            blocked.append("delay lines at every coarse setting")
        times.append(
            {
                "utc": format_utc(when),
                "altitude_deg": round(float(altitude[index]), 4),
                "azimuth_deg": round(float(azimuth[index]), 4),
                "hour_angle_h": round(float(hours[index]) / 15, 5),
                "baselines": [
                    {
                        "stations": list(pair),
                        "u_m": round(float(u), 4),
                        "v_m": round(float(v), 4),
                        "w_m": round(float(w), 4),
                        "projected_m": round(float(np.hypot(u, v)), 4),
                    }
                    for pair, (u, v, w) in zip(pairs, uvw[index], strict=True)
                ],
                "in_reach": not blocked,
                "blocked_by": blocked,
            }
        )
    paths = None if reach.settings is None else coarse_paths_m(clock.stations, reach.settings)
    return {
        "array": clock.array.name,
        "stations": names,
        "target": {"name": target.name, "ra_deg": target.ra_deg, "dec_deg": target.dec_deg},
        "coarse_paths_m": paths,
        "times": times,
        "windows": windows_json(reach.target_windows),
        "notes": ([f"Never in reach: {reach.why_not}."] if reach.why_not else []) + clock.notes,
    }

import numpy as np
import pytest
from astropy import units
from astropy.coordinates import EarthLocation

from pinlight.arrays.geometry import baselines


def test_every_pair_once_and_longest_first(north):
    pairs = baselines(north.station)
    assert len({frozenset(pair.stations) for pair in pairs}) == len(pairs) == 15
    lengths = [pair.length_m for pair in pairs]
    assert lengths == sorted(lengths, reverse=True)


def test_lengths_agree_with_geocentric_places(south):
    # Stations put on the Earth through astropy's geodesy: east, north, up turned into X, Y, Z.
    site = EarthLocation(
        south.longitude_deg * units.deg, south.latitude_deg * units.deg, south.height_m * units.m
    )
    lon, lat = np.radians(south.longitude_deg), np.radians(south.latitude_deg)
    east = np.array([-np.sin(lon), np.cos(lon), 0])
    north = np.array([-np.sin(lat) * np.cos(lon), -np.sin(lat) * np.sin(lon), np.cos(lat)])
    up = np.array([np.cos(lat) * np.cos(lon), np.cos(lat) * np.sin(lon), np.sin(lat)])
    centre = np.array([site.x.value, site.y.value, site.z.value])
    places = {s.name: centre + s.east_m * east + s.north_m * north + s.up_m * up for s in south.station}
    for pair in baselines(south.station):
        a, b = (places[name] for name in pair.stations)
        assert pair.length_m == pytest.approx(np.linalg.norm(a - b), abs=1e-6)

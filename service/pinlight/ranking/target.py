"""The science target of a ranking."""

from dataclasses import dataclass, field
from typing import Any

from pinlight.errors import InputError
from pinlight.photometry.bands import check_magnitude
from pinlight.sky.positions import check_position

__all__ = ["Target"]

_LONGEST_NAME = 200


@dataclass(frozen=True)
class Target:
    """Where the target is and how bright; ICRS, epoch 2000.

    `star_id` is set when the target is a star of the catalogue, which then is no calibrator of
    itself. `motion` is its proper motion in RA (with cos dec) and Dec in mas/yr, parallax in mas and
    radial velocity in km/s. `magnitudes` maps bands to magnitudes; a band that is missing leaves terms
    out. `diameter_error_mas` is None where it is not known.

    Raises
    ------
    InputError
        If the position is no place on the sky, the name cannot be printed, the diameter is not
        positive, or a magnitude cannot be one.
    """

    ra_deg: float
    dec_deg: float
    name: str = ""
    magnitudes: dict[str, float] = field(default_factory=dict)
    diameter_mas: float | None = None
    star_id: int | None = None
    motion: tuple[float, float, float, float] | None = None
    diameter_error_mas: float | None = None

    def __post_init__(self) -> None:
        check_position(self.ra_deg, self.dec_deg)
        if not self.name.isprintable() or len(self.name) > _LONGEST_NAME:
            shown = self.name[:60]
            raise InputError(
                f"name is {shown!r}; it must be printable and have at most {_LONGEST_NAME} letters"
            )
        if self.diameter_mas is not None and not 0 < self.diameter_mas < 1e4:
            raise InputError(f"diameter_mas is {self.diameter_mas:g}; it must be positive and below 10000")
        if self.diameter_error_mas is not None and not 0 <= self.diameter_error_mas < 1e4:
            error = self.diameter_error_mas
            raise InputError(f"diameter_error_mas is {error:g}; it must lie between 0 and 10000")
        for band, value in self.magnitudes.items():
            check_magnitude(band, value)

    def to_dict(self, band: str) -> dict[str, Any]:
        """As it stands in a ranking's JSON; `magnitude` is that in `band`."""
        return {
            "name": self.name,
            "ra_deg": round(self.ra_deg, 7),
            "dec_deg": round(self.dec_deg, 7),
            "magnitude": self.magnitudes.get(band),
            "magnitudes": dict(self.magnitudes),
            "diameter_mas": self.diameter_mas,
            "diameter_error_mas": self.diameter_error_mas,
            "star_id": self.star_id,
        }

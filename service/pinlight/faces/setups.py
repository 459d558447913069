"""Arrays, setups and clocks from what people name."""

from collections.abc import Mapping
from pathlib import Path

from pinlight.arrays.files import Array, load_array
from pinlight.errors import InputError, NotFoundError
from pinlight.ranking.clock import Clock, moment_clock, night_clock, span_clock
from pinlight.ranking.setup import Setup, quick_setup, setup_of
from pinlight.resources import seed_folder

__all__ = [
    "array_of",
    "find_array",
    "is_file",
    "known_arrays",
    "make_clock",
    "make_setup",
    "named_array",
    "station_names",
]


def make_setup(
    array: str | Path | Array | None,
    stations: list[str] | str | None,
    mode: str | None,
    baseline_m: float | None,
    wavelength_um: float | None,
) -> Setup:
    """The setup of an array, or of one baseline at one wavelength.

    Raises
    ------
    InputError
        If neither or both are given, or either is impossible.
    """
    quick = {"baseline_m": baseline_m, "wavelength_um": wavelength_um}
    given = [name for name, value in quick.items() if value is not None]
    if array is not None:
        if given:
            raise InputError(f"array and {given[0]} are both given; give one or the other")
        return setup_of(array_of(array), station_names(stations), mode)
    for name, value in (("stations", stations), ("mode", mode)):
        if value is not None:
            raise InputError(f"{name} is given without an array; give the array too")
    if baseline_m is None or wavelength_um is None:
        missing = "array" if not given else next(name for name, value in quick.items() if value is None)
        raise InputError(f"{missing} is missing; give an array, or both baseline_m and wavelength_um")
    return quick_setup(baseline_m, wavelength_um)


def make_clock(
    array: Array,
    stations: list[str] | str | None,
    night: str | None,
    at: str | None,
    from_: str | None,
    to: str | None,
) -> Clock | None:
    """The clock of a night, a moment or a span; None where no time is given.

    Raises
    ------
    InputError
        If more than one is given, or a span lacks an end.
    """
    given = [name for name, value in (("night", night), ("at", at), ("from", from_ or to)) if value is not None]
    if len(given) > 1:
        raise InputError(f"{' and '.join(given)} are both given; give a night, a time, or from and to")
    chosen = array.choose_stations(station_names(stations))
    if night is not None:
        return night_clock(array, chosen, night)
    if at is not None:
        return moment_clock(array, chosen, at)
    if from_ is not None or to is not None:
        if from_ is None or to is None:
            raise InputError(f"{'from' if from_ is None else 'to'} is missing; give both, or a night")
        return span_clock(array, chosen, from_, to)
    return None


def array_of(array: str | Path | Array) -> Array:
    """An array as it is, or by file or name; see `find_array`."""
    return array if isinstance(array, Array) else find_array(array)


def known_arrays(folder: Path | None = None) -> dict[str, Array]:
    """The arrays of a folder by file name, by default the invented ones that Pinlight ships."""
    folder = folder or seed_folder() / "arrays"
    return {path.stem: load_array(path) for path in sorted(folder.glob("*.toml"))}


def named_array(name: str, arrays: Mapping[str, Array]) -> Array:
    """One of `arrays` by its key or its full name.

    Raises
    ------
    NotFoundError
        If none is called so.
    """
    wanted = name.strip().casefold()
    for key, array in arrays.items():
        if wanted in (key.casefold(), array.name.casefold()):
            return array
    raise NotFoundError(f"array is {name!r}; it may be one of {', '.join(arrays)}")


def find_array(name: str | Path) -> Array:
    """An array by file, or one of those that Pinlight ships by name.

    Raises
    ------
    NotFoundError
        If there is no such array.
    InputError
        If the file is wrong.
    """
    if isinstance(name, Path) or Path(name).suffix == ".toml" or is_file(str(name)):
        return load_array(name)
    return named_array(name, known_arrays())


def is_file(name: str) -> bool:
    """Whether a text names a file; one too long to be a file name does not."""
    try:
        return Path(name).is_file()
    except (OSError, ValueError):
        return False


def station_names(names: list[str] | str | None) -> list[str] | None:
    """A list of stations, also from one text with commas."""
    return [name.strip() for name in names.split(",") if name.strip()] if isinstance(names, str) else names

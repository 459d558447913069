"""Spectral types: temperature code, luminosity class and peculiarities."""

import re
from dataclasses import dataclass
from functools import lru_cache

import numpy as np
from numpy.typing import ArrayLike, NDArray

from pinlight.errors import InputError

__all__ = ["LUMINOSITY_GROUPS", "SpectralType", "luminosity_groups", "parse_spectral_type", "spectral_code"]

_LETTERS = "OBAFGKM"
LUMINOSITY_GROUPS = ("dwarf", "subgiant", "giant", "supergiant")
_TEMPERATURE = re.compile(r"([OBAFGKM])(\d(?:\.\d+)?)?")
_LUMINOSITY = re.compile(r"(Ia\+|Iab|Ia|Ib|III|II|IV|VI|V|I)")
_GROUP_OF = {"VI": "dwarf", "V": "dwarf", "IV": "subgiant", "III": "giant", "II": "giant"}
# Words and elements whose letters are no marks of the lines' shape.
_WORDS = re.compile(r"Fe|CN|Hg|Mn|mn|Ca|Cr|Eu|Si|Sr|metal\w*|weak|strong|comp\w*|var|delDel")
_SECOND_STAR = re.compile(r"[IV]\w*:?-[OBAFGKM]\d")


@dataclass(frozen=True)
class SpectralType:
    """What a spectral type says: `code` is 0 for O0, 10 for B0 … 60 for M0 plus the subclass.

    `code` is NaN and `luminosity` empty where the type does not say. `degenerate` marks white
    dwarfs, `normal` is false for them and for carbon, S and Wolf-Rayet types, to which no
    surface-brightness relation applies.
    """

    code: float
    luminosity: str
    composite: bool = False
    broad_lined: bool = False
    emission: bool = False
    peculiar: bool = False
    degenerate: bool = False
    normal: bool = True


def spectral_code(text: str) -> float:
    """The temperature code of a type such as ``K2.5``.

    >>> spectral_code("A0"), spectral_code("K2.5")
    (20.0, 52.5)

    Raises
    ------
    InputError
        If `text` does not begin with a temperature class.
    """
    match = _TEMPERATURE.match(text)
    if not match:
        raise InputError(f"spectral type is {text!r}; it must begin with one of {', '.join(_LETTERS)}")
    return 10.0 * _LETTERS.index(match[1]) + float(match[2] or 5)


@lru_cache(maxsize=20_000)
def parse_spectral_type(text: str) -> SpectralType:
    """Read a spectral type as catalogues write it; a blank or unreadable one says nothing.

    >>> parse_spectral_type("A0Vn").broad_lined, parse_spectral_type("K1III-IV").luminosity
    (True, 'III')
    """
    text = text.strip()
    if re.match(r"D[ABCOQZ]", text) or text.startswith("WD"):
        return SpectralType(np.nan, "", degenerate=True, normal=False)
    if re.match(r"[CSRNW]", text):
        return SpectralType(np.nan, "", normal=False)
    body = text
    if metallic := re.search(r"h([OBAFGKM]\d?(?:\.\d)?)", text):  # kA5hF0mF2: the hydrogen lines decide
        body = metallic[1] + text[metallic.end() :]
    body = re.sub(r"^(sd|g|d)?[:\s]*", "", body)
    body = re.sub(r"^([OBAFGKM][\d.]*)\+(?=[IV])", r"\1", body)  # K2+V: between K2 V and K3 V
    temperature = _TEMPERATURE.search(body)
    if not temperature:
        return SpectralType(np.nan, "")
    first, plus, second = body.partition("+")
    after = first[temperature.end() :] if temperature.end() <= len(first) else ""
    luminosity = _LUMINOSITY.search(after)
    marks = _WORDS.sub("", after)
    return SpectralType(
        code=10.0 * _LETTERS.index(temperature[1]) + float(temperature[2] or 5),
        luminosity="VI" if text.startswith("sd") else (luminosity[1] if luminosity else ""),
        composite=bool(plus and re.match(r"\s*[OBAFGKMDWCS.]", second)) or bool(_SECOND_STAR.search(body)),
        broad_lined="n" in marks,
        emission="e" in marks,
        peculiar=bool(metallic) or bool(re.search(r"p|m|s|Hg", re.sub(r"metal\w*|comp\w*", "", after))),
    )


def luminosity_groups(
    types: list[SpectralType], v_ks: ArrayLike, v_mag: ArrayLike, parallax_mas: ArrayLike
) -> NDArray[np.str_]:
    """Dwarf, subgiant, giant or supergiant for each star, '' where nothing applies, shape (N,).

    From the luminosity class; where the type has none, from absolute brightness and colour: a
    star redder than V - Ks = 1.6 is a giant when its absolute Ks magnitude is below 1.3, which
    lies between the brightest subgiants and the faintest red giants; a bluer one when it is
    below -1 (common practice, no source). Bright giants count as giants. `v_ks` and `v_mag` are
    dereddened.
    """
    v_ks, v_mag, parallax = (np.asarray(value, float) for value in (v_ks, v_mag, parallax_mas))
    with np.errstate(invalid="ignore", divide="ignore"):
        absolute_ks = v_mag - v_ks + 5 * np.log10(parallax / 100)
        limit = np.where(v_ks >= 1.6, 1.3, -1.0)
        bright = np.where(np.isfinite(absolute_ks), absolute_ks < limit, False)
    guessed = np.where(bright, "giant", "dwarf")
    return np.array(
        [
            ""
            if not spectral.normal
            else _GROUP_OF.get(spectral.luminosity, "supergiant")
            if spectral.luminosity
            else guess
            for spectral, guess in zip(types, guessed, strict=True)
        ],
        dtype="U10",
    )

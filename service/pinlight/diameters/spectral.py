"""Spectral types: temperature code, luminosity class and peculiarities."""

import re
from dataclasses import dataclass
from functools import lru_cache

import numpy as np
from numpy.typing import ArrayLike, NDArray

from pinlight.errors import InputError

__all__ = [
    "LUMINOSITY_GROUPS",
    "SpectralType",
    "luminosity_probabilities",
    "parse_spectral_type",
    "spectral_code",
]

Floats = NDArray[np.float64]

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

    @property
    def group(self) -> str:
        """Its luminosity group of `LUMINOSITY_GROUPS`, '' where the type names no class."""
        return _GROUP_OF.get(self.luminosity, "supergiant") if self.luminosity else ""


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
    body = re.sub(r"\^[-+]", "", body)  # K5^+ III, as some lists write K5+III
    body = re.sub(r"^([OBAFGKM][\d.]*)[-+](?=\s*[IV])", r"\1", body)  # K2+V: between K2 V and K3 V
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


# How the classed stars of the seed (1950s to 2012, 36 000 of them, Ks above 4.5) share out over the
# classes, by absolute Ks magnitude and (V - Ks)0: per cent of dwarfs, subgiants and giants. Ours.
_ABSOLUTE_KS = np.array([-3.0, -1.75, -1.25, -0.75, -0.25, 0.25, 0.75, 1.25, 1.75, 2.25, 2.75, 3.5, 5.0])
_V_KS = np.array([1.1, 1.45, 2.05, 2.4, 2.9, 4.0])
_PER_CENT = np.array(
    [
        [(10, 30, 60), (30, 28, 42), (58, 20, 22), (55, 21, 24), (55, 22, 23), (57, 22, 21), (62, 23, 15),
         (69, 22, 9), (75, 18, 7), (83, 12, 5), (92, 6, 2), (90, 8, 2), (95, 4, 1)],
        [(5, 15, 80), (15, 25, 60), (25, 30, 45), (35, 34, 31), (40, 34, 26), (66, 21, 13), (71, 23, 6),
         (80, 16, 4), (85, 12, 3), (89, 9, 2), (92, 6, 2), (91, 7, 2), (95, 4, 1)],
        [(0, 1, 99), (4, 3, 93), (3, 7, 90), (6, 14, 80), (15, 28, 57), (23, 40, 37), (37, 41, 22),
         (46, 41, 13), (56, 31, 13), (64, 26, 10), (79, 18, 3), (86, 9, 5), (93, 5, 2)],
        [(0, 1, 99), (1, 2, 97), (1, 4, 95), (2, 7, 91), (4, 15, 81), (6, 22, 72), (14, 33, 53), (23, 29, 48),
         (45, 27, 28), (55, 27, 18), (66, 24, 10), (87, 9, 4), (97, 2, 1)],
        [(0, 2, 98), (1, 3, 96), (1, 4, 95), (1, 6, 93), (4, 6, 90), (6, 6, 88), (14, 20, 66), (30, 25, 45),
         (50, 25, 25), (70, 20, 10), (85, 10, 5), (98, 1, 1), (98, 1, 1)],
        [(0, 2, 98), (1, 3, 96), (3, 5, 92), (4, 4, 92), (5, 5, 90), (8, 7, 85), (20, 15, 65), (35, 20, 45),
         (60, 15, 25), (80, 10, 10), (95, 3, 2), (100, 0, 0), (100, 0, 0)],
    ]
) / 100  # fmt: skip
# The same by colour alone, for a star without a parallax.
_WITHOUT_PARALLAX = np.array(
    [(74, 17, 9), (85, 11, 4), (45, 18, 37), (12, 6, 82), (18, 3, 79), (55, 1, 44)]
) / 100  # fmt: skip


def luminosity_probabilities(
    stated: NDArray[np.str_], v_ks: ArrayLike, ks_mag: ArrayLike, parallax_mas: ArrayLike
) -> Floats:
    """How probable each luminosity group is for each star.

    A stated class is believed. Where the type names none, the classed stars of the seed at the same
    absolute Ks magnitude and colour tell, without a parallax those of the same colour, and without a
    colour a dwarf is assumed. Supergiants are too rare there to be guessed. Bright giants count as giants.

    Parameters
    ----------
    stated : array of str, shape (N,)
        The group that the spectral type states, '' for none.
    v_ks, ks_mag : array, shape (N,)
        Dereddened. [mag]
    parallax_mas : array, shape (N,)

    Returns
    -------
    probabilities : array, shape (N, 4)
        Columns follow `LUMINOSITY_GROUPS`; each row adds up to 1.
    """
    v_ks, ks_mag, parallax = (np.asarray(value, float) for value in (v_ks, ks_mag, parallax_mas))
    probabilities = (np.asarray(stated)[:, None] == np.array(LUMINOSITY_GROUPS)).astype(float)
    unknown = np.flatnonzero(np.asarray(stated) == "")
    probabilities[unknown, 0] = 1.0
    with np.errstate(invalid="ignore", divide="ignore"):
        absolute = ks_mag[unknown] + 5 * np.log10(parallax[unknown] / 100)
    colour = np.clip(np.nan_to_num(v_ks[unknown]), _V_KS[0], _V_KS[-1])
    step = np.clip(np.searchsorted(_V_KS, colour, side="right") - 1, 0, len(_V_KS) - 2)
    along = ((colour - _V_KS[step]) / (_V_KS[step + 1] - _V_KS[step]))[:, None]
    at_node = np.stack(
        [[np.interp(absolute, _ABSOLUTE_KS, row[:, i]) for i in range(3)] for row in _PER_CENT]
    )  # (colours, classes, stars)
    star = np.arange(unknown.size)
    by_both = at_node[step, :, star] * (1 - along) + at_node[step + 1, :, star] * along
    by_colour = _WITHOUT_PARALLAX[step] * (1 - along) + _WITHOUT_PARALLAX[step + 1] * along
    guessed = np.where(np.isfinite(absolute)[:, None], by_both, by_colour)
    coloured = np.isfinite(v_ks[unknown])
    probabilities[unknown[coloured], :3] = guessed[coloured] / guessed[coloured].sum(axis=1, keepdims=True)
    return probabilities

"""Names of stars as people write them, reduced to keys that can be compared."""

import re
import unicodedata

__all__ = ["key_beginnings", "name_key", "short_keys"]

_GREEK = {
    "alpha": "alp", "beta": "bet", "gamma": "gam", "delta": "del", "epsilon": "eps", "zeta": "zet",
    "eta": "eta", "theta": "the", "iota": "iot", "kappa": "kap", "lambda": "lam", "mu": "mu", "nu": "nu",
    "xi": "xi", "omicron": "omi", "pi": "pi", "rho": "rho", "sigma": "sig", "tau": "tau",
    "upsilon": "ups", "phi": "phi", "chi": "chi", "psi": "psi", "omega": "ome",
}  # fmt: skip
_LETTERS = dict(zip("αβγδεζηθικλμνξοπρστυφχψω", _GREEK.values(), strict=True)) | {"ς": "sig"}
_WRITTEN = _GREEK | {short: short for short in _GREEK.values()} | {"alf": "alp", "tet": "the", "ksi": "xi"}

# IAU abbreviations and Latin genitives of the 88 constellations: IAU (1922, 1928); Delporte (1930).
_GENITIVES = """
And Andromedae|Ant Antliae|Aps Apodis|Aqr Aquarii|Aql Aquilae|Ara Arae|Ari Arietis|Aur Aurigae|
Boo Bootis|Cae Caeli|Cam Camelopardalis|Cnc Cancri|CVn Canum Venaticorum|CMa Canis Majoris|
CMi Canis Minoris|Cap Capricorni|Car Carinae|Cas Cassiopeiae|Cen Centauri|Cep Cephei|Cet Ceti|
Cha Chamaeleontis|Cir Circini|Col Columbae|Com Comae Berenices|CrA Coronae Australis|
CrB Coronae Borealis|Crv Corvi|Crt Crateris|Cru Crucis|Cyg Cygni|Del Delphini|Dor Doradus|
Dra Draconis|Equ Equulei|Eri Eridani|For Fornacis|Gem Geminorum|Gru Gruis|Her Herculis|
Hor Horologii|Hya Hydrae|Hyi Hydri|Ind Indi|Lac Lacertae|Leo Leonis|LMi Leonis Minoris|Lep Leporis|
Lib Librae|Lup Lupi|Lyn Lyncis|Lyr Lyrae|Men Mensae|Mic Microscopii|Mon Monocerotis|Mus Muscae|
Nor Normae|Oct Octantis|Oph Ophiuchi|Ori Orionis|Pav Pavonis|Peg Pegasi|Per Persei|Phe Phoenicis|
Pic Pictoris|Psc Piscium|PsA Piscis Austrini|Pup Puppis|Pyx Pyxidis|Ret Reticuli|Sge Sagittae|
Sgr Sagittarii|Sco Scorpii|Scl Sculptoris|Sct Scuti|Ser Serpentis|Sex Sextantis|Tau Tauri|
Tel Telescopii|Tri Trianguli|TrA Trianguli Australis|Tuc Tucanae|UMa Ursae Majoris|
UMi Ursae Minoris|Vel Velorum|Vir Virginis|Vol Volantis|Vul Vulpeculae
"""
_CONSTELLATIONS: dict[str, str] = {}
for _entry in _GENITIVES.replace("\n", "").split("|"):
    _short, _, _long = _entry.partition(" ")
    _CONSTELLATIONS[_short.casefold()] = _CONSTELLATIONS[_long.replace(" ", "").casefold()] = _short.casefold()

_ANY_GREEK = "|".join(sorted(_WRITTEN, key=len, reverse=True))
_ANY_CONSTELLATION = "|".join(sorted(_CONSTELLATIONS, key=len, reverse=True))
_BAYER = re.compile(rf"(?:\d+)?({_ANY_GREEK})0*(\d*)({_ANY_CONSTELLATION})([a-d]{{0,2}})")
_OTHER = re.compile(rf"(\d+|v\d+|[a-z]{{1,2}}\d?)({_ANY_CONSTELLATION})([a-d]{{0,2}})")
_NUMBERED = re.compile(r"(hd|hip|hr|gj|gl|gliese|sao|ltt|lhs|nltt)0*(\d[\d.]*)([a-z]{0,3})")
_GLIESE = {"gl": "gj", "gliese": "gj"}


def name_key(name: str) -> str:
    """The key of a name: case, blanks, dots and ways of writing Greek do not matter.

    >>> {name_key(n) for n in ("tau Cet", "τ Cet", "Tau Ceti", "TAU.CET", "* tau Cet")}
    {'taucet'}
    >>> name_key("hd 010700"), name_key("HD10700")
    ('hd10700', 'hd10700')
    """
    if name.isascii():  # most names by far, and a table may have millions
        text = name.lower()
    else:
        text = unicodedata.normalize("NFKC", name).casefold()
        for letter, written in _LETTERS.items():
            text = text.replace(letter, written)
    text = re.sub(r"^\s*(v\*|\*\*?|name\b)", "", text)
    key = re.sub(r"[\s_*,'’]", "", text)
    if match := _NUMBERED.fullmatch(key):
        return _GLIESE.get(match[1], match[1]) + match[2].rstrip(".") + match[3]
    key = key.replace(".", "")
    if match := _BAYER.fullmatch(key):
        return _WRITTEN[match[1]] + match[2] + _CONSTELLATIONS[match[3]] + match[4]
    if match := _OTHER.fullmatch(key):
        return match[1] + _CONSTELLATIONS[match[2]] + match[3]
    return key


def short_keys(name: str) -> list[str]:
    """Keys by which a person may mean this name though it says more: no superscript, no component.

    >>> short_keys("mu1 Sco"), short_keys("GJ 4 A"), short_keys("HD 10700")
    (['musco'], ['gj4'], [])
    """
    key = name_key(name)
    keys = []
    if match := _BAYER.fullmatch(key):
        letter, constellation = _WRITTEN[match[1]], _CONSTELLATIONS[match[3]]
        keys = [letter + match[2] + constellation, letter + constellation]
    elif match := _NUMBERED.fullmatch(key):
        keys = [match[1] + match[2]]
    return [short for short in dict.fromkeys(keys) if short != key]


def key_beginnings(written: str) -> list[str]:
    """What the keys of names begin with that a person may be about to write.

    >>> key_beginnings("alpha c"), key_beginnings("Alph"), key_beginnings("hd 107")
    (['alphac', 'alpc'], ['alph', 'alp'], ['hd107'])
    """
    key = name_key(written)
    beginnings = [key]
    for full, short in _GREEK.items():
        if key.startswith(full):
            beginnings.append(short + key.removeprefix(full))
        elif len(key) >= 3 and full.startswith(key):
            beginnings.append(short)
    return [begin for begin in dict.fromkeys(beginnings) if begin]

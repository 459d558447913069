import pytest
from hypothesis import given
from hypothesis import strategies as st

from pinlight.catalogue.names import name_key, short_keys


@pytest.mark.parametrize(
    ("written", "key"),
    [
        (["hd 10700", "HD10700", "Hd  10700", "hd.10700", "HD 010700"], "hd10700"),
        (["tau Cet", "τ Cet", "Tau Ceti", "TAU CET", "tau.Cet", "tauCet", "* tau Cet", "52 tau Cet"], "taucet"),
        (["alpha Cen", "alf Cen", "α Centauri", "Alp Cen", "alpha centauri"], "alpcen"),
        (["pi1 Ori", "π1 Ori", "π¹ Ori", "pi01 Ori", "pi 1 Orionis"], "pi1ori"),
        (["52 Cet", "52 Ceti"], "52cet"),
        (["V352 CMa", "v352 canis majoris", "V* V352 CMa"], "v352cma"),
        (["GJ 71", "Gl 71", "Gliese 71"], "gj71"),
        (["BD+17 2140", "bd +17 2140"], "bd+172140"),
        (["theta CrB", "tet CrB", "θ Coronae Borealis"], "thecrb"),
        (["xi Boo", "ksi Boo", "ξ Bootis"], "xiboo"),
    ],
)
def test_ways_of_writing_a_name_share_a_key(written, key):
    assert {name_key(name) for name in written} == {key}


def test_names_that_differ_keep_different_keys():
    names = ["eta Cet", "zeta Cet", "theta Cet", "beta Cet", "nu Cet", "mu Cet", "chi Cet", "psi Cet", "pi Sco"]
    names += ["psi Sco", "HD 1070", "HD 10700", "HD 10700A", "52 Cet", "52 Cyg", "A Cen", "V A Cen"]
    assert len({name_key(name) for name in names}) == len(names)


def test_short_keys_leave_out_superscript_and_component():
    assert short_keys("alpha1 Cen") == ["alpcen"]
    assert short_keys("HD 1237A") == ["hd1237"]
    assert short_keys("tau Cet") == []


@given(st.text(max_size=40))
def test_any_text_has_a_stable_key(text):
    key = name_key(text)
    assert key == key.casefold()
    assert " " not in key
    assert name_key(f"  {text}") == key
    assert name_key(text.casefold()) == key

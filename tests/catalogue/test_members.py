import re

import pytest
from sqlalchemy import text

from pinlight.catalogue.members import add_member, change_role, members, renew_token, revoke_member
from pinlight.catalogue.store import open_catalogue
from pinlight.errors import InputError, NotAllowedError, NotFoundError, TokenError


@pytest.fixture
def team(seeded_url, opened):
    """A keeper's catalogue and the tokens of everybody."""
    catalogue = opened(seeded_url)
    tokens = {"keeper": add_member(catalogue, "Kit", "keeper")}
    kit = catalogue.acting(tokens["keeper"])
    tokens |= {role: add_member(kit, name, role) for name, role in (("Ed", "editor"), ("Rea", "reader"))}
    tokens["revoked"] = add_member(kit, "Gone", "keeper")
    revoke_member(kit, "Gone")
    return kit, tokens | {"unknown": "x" * 43, "none": None}


# What each may do, by whom: the least role that it takes.
ACTS = {
    "list members": ("reader", members),
    "set a standing": ("editor", lambda c: c.set_standing(1, "vouched", "calm for years")),
    "freeze an edition": ("keeper", lambda c: c.freeze()),
    "add a member": ("keeper", lambda c: add_member(c, "New", "reader")),
    "renew a token": ("keeper", lambda c: renew_token(c, "Rea")),
    "revoke a member": ("keeper", lambda c: revoke_member(c, "Rea")),
    "change a role": ("keeper", lambda c: change_role(c, "Rea", "editor")),
}
WHO = ("reader", "editor", "keeper", "revoked", "unknown", "none")


@pytest.mark.parametrize("act", ACTS)
def test_who_may_do_what(team, act):
    kit, tokens = team
    needs, call = ACTS[act]
    for who in WHO:
        catalogue = kit.acting(tokens[who])
        before = len(kit.changes(most=1000))
        if who in ("revoked", "unknown", "none"):
            with pytest.raises(TokenError, match=r"set PINLIGHT_TOKEN|not known, or was revoked"):
                call(catalogue)
        elif WHO.index(who) < WHO.index(needs):
            with pytest.raises(NotAllowedError, match=f"is an? {who}; to {act} takes an? {needs}"):
                call(catalogue)
        else:
            call(catalogue)
            continue
        assert len(kit.changes(most=1000)) == before


def test_a_token_is_shown_once_and_stored_as_a_hash(team):
    kit, tokens = team
    assert len(tokens["keeper"]) == 43
    with kit.reading() as connection:
        dump = str(connection.execute(text("SELECT * FROM member")).all())
        dump += str(connection.execute(text("SELECT * FROM change")).all())
    assert tokens["keeper"] not in dump
    hashes = re.findall(r"'([0-9a-f]{64})'", dump)
    assert len(set(hashes)) == 3  # a revoked one is gone
    assert {row["name"] for row in members(kit)} == {"Kit", "Ed", "Rea", "Gone"}
    assert not any("token" in key for row in members(kit) for key in row)


def test_a_revoked_token_stays_worthless_when_its_member_comes_back(team):
    kit, tokens = team
    new = add_member(kit, "Gone", "reader")
    assert new != tokens["revoked"]
    assert kit.acting(new).person().role == "reader"
    with pytest.raises(TokenError, match="not known, or was revoked"):
        kit.acting(tokens["revoked"]).person()
    newer = renew_token(kit, "Gone")
    with pytest.raises(TokenError):
        kit.acting(new).person()
    assert kit.acting(newer).person().name == "Gone"


def test_there_is_always_a_keeper(seeded_url, opened):
    catalogue = opened(seeded_url)
    with pytest.raises(InputError, match="role is 'reader'; the first member must be a keeper"):
        add_member(catalogue, "Rea", "reader")
    kit = catalogue.acting(add_member(catalogue, "Kit", "keeper"))
    for call in (lambda: revoke_member(kit, "Kit"), lambda: change_role(kit, "Kit", "reader")):
        with pytest.raises(InputError, match="name is 'Kit', the only keeper; add another keeper first"):
            call()
    kay = catalogue.acting(add_member(kit, "Kay", "keeper"))
    revoke_member(kay, "Kit")
    assert [row["name"] for row in members(kay) if row["revoked_utc"]] == ["Kit"]


def test_impossible_members_are_refused(team):
    kit, _ = team
    for name, role, message in (
        ("", "reader", "name is ''; write up to 80 letters"),
        ("a\nb; drop", "reader", "name is 'a b; drop'"),
        ("Ann", "boss", "role is 'boss'; it may be one of reader, editor, keeper"),
        ("Ed", "reader", "name is 'Ed', a member already"),
    ):
        with pytest.raises(InputError, match=message):
            add_member(kit, name, role)
    with pytest.raises(NotFoundError, match="name is 'Nobody'; members are Ed, Kit, Rea"):
        revoke_member(kit, "Nobody")


def test_a_catalogue_without_members_belongs_to_whoever_can_write_it(seeded_url, monkeypatch):
    monkeypatch.setenv("LOGNAME", "ada")
    catalogue = open_catalogue(seeded_url)
    assert catalogue.person().name == "ada"
    assert catalogue.person().role == "keeper"
    assert catalogue.set_standing(1, "vouched", "calm")["made_by"] == "ada"
    with pytest.raises(TokenError):
        catalogue.acting("made up").person()
    catalogue.close()

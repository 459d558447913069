"""The team's records over HTTP and by command: who may do what, and what comes back."""

import base64
import json
import os
import re
import shutil

import pytest
from click.testing import CliRunner

from pinlight.catalogue.members import add_member, revoke_member
from pinlight.catalogue.store import open_catalogue
from pinlight.faces import models
from pinlight.faces.cli import main
from pinlight.faces.http import create_app

JUDGEMENT = {
    "standing": "vouched",
    "reason": "calm for years",
    "band": "H",
    "evidence": ["2020A&A...1", {"n": 3}],
}
RANKING = {"target": "tau Cet", "baseline_m": 100, "wavelength_um": 2.2}
PLAN = {
    "targets": [{"name": "T", "ra_deg": 20, "dec_deg": 20, "magnitudes": {"H": 4}}],
    "array": "north", "mode": "H", "from": "2026-12-01T20:00:00Z", "to": "2026-12-01T22:00:00Z", "time_limit_s": 1,
}  # fmt: skip
INTAKE = {
    "table": "name,ra,dec,V,K\nHD 10700,26.017,-15.9375,3.5,1.68\nnew one,11.5,12.5,7.0,abc\n",
    "source": "A list", "reference": "2020Ref",
}  # fmt: skip
# Every endpoint, an example of its question, and the least role that it takes to write.
ENDPOINTS = [
    ("GET", "/api/v1/rankings", RANKING, None),
    ("POST", "/api/v1/rankings", RANKING, None),
    ("POST", "/api/v1/plans", PLAN, None),
    ("GET", "/api/v1/stars", {"name": "tau Cet"}, None),
    ("GET", "/api/v1/stars/1", None, None),
    ("GET", "/api/v1/stars/1/standings", None, None),
    ("POST", "/api/v1/stars/1/standings", JUDGEMENT, "editor"),
    ("GET", "/api/v1/stars/1/changes", None, None),
    ("GET", "/api/v1/changes", None, None),
    ("POST", "/api/v1/intakes", INTAKE, "editor"),
    ("POST", "/api/v1/stars/1/preferences", {"band": "V", "source": None}, "keeper"),
    ("POST", "/api/v1/stars/9/mergers", {"into_id": 8}, "keeper"),
    ("POST", "/api/v1/stars/1/splits", {"source": "none", "name": "none"}, "keeper"),
    ("POST", "/api/v1/changes/1/undo", None, "keeper"),
    ("GET", "/api/v1/editions", None, None),
    ("POST", "/api/v1/editions", None, "keeper"),
    ("GET", "/api/v1/editions/EDITION", None, None),
    ("GET", "/api/v1/editions/EDITION/comparison", None, None),
    ("GET", "/api/v1/arrays", None, None),
    ("GET", "/api/v1/health", None, None),
    ("GET", "/api/v1/health/live", None, "nothing"),
    ("GET", "/api/v1/openapi.json", None, None),
]
ROLES = ("reader", "editor", "keeper")


@pytest.fixture(scope="module")
def team(seeded_path, tmp_path_factory):
    """A catalogue with members, its tokens, and a client where reading is open and one where it is not."""
    folder = tmp_path_factory.mktemp("team")
    (folder / "p.db").write_bytes(seeded_path.read_bytes())
    shutil.copytree(f"{seeded_path}.editions", folder / "p.db.editions", copy_function=os.link)
    catalogue = open_catalogue(str(folder / "p.db"))
    tokens = {"keeper": add_member(catalogue, "Kit", "keeper")}
    kit = catalogue.acting(tokens["keeper"])
    tokens |= {role: add_member(kit, name, role) for name, role in (("Ed", "editor"), ("Rea", "reader"))}
    tokens["revoked"] = add_member(kit, "Gone", "keeper")
    revoke_member(kit, "Gone")
    clients = [create_app(catalogue, open_reading=open_).test_client() for open_ in (True, False)]
    yield {
        "path": folder / "p.db",
        "tokens": tokens,
        "open": clients[0],
        "closed": clients[1],
        "catalogue": catalogue,
    }
    catalogue.close()


def ask(team, where, who, method, path, question=None):
    path = path.replace("EDITION", team["catalogue"].editions()[-1]["name"])
    headers = {} if who == "none" else {"Authorization": f"Bearer {team['tokens'][who]}"}
    how = {"query_string": question} if method == "GET" else {"json": question}
    return team[where].open(path, method=method, headers=headers, **how)


def expected(where, who, needs):
    if needs == "nothing":
        return 200
    if who == "revoked" or (who == "none" and (needs or where == "closed")):
        return 401
    if needs and ROLES.index(who) < ROLES.index(needs):
        return 403
    return (200, 201, 400, 404) if needs else 200  # what is done twice, or is not there, is told so


@pytest.mark.parametrize("where", ["open", "closed"])
@pytest.mark.parametrize("who", ["none", "revoked", *ROLES])
@pytest.mark.parametrize(
    ("method", "path", "question", "needs"), ENDPOINTS, ids=[f"{e[0]} {e[1]}" for e in ENDPOINTS]
)
def test_who_may_ask_what(team, where, who, method, path, question, needs):
    answer = ask(team, where, who, method, path, question)
    wanted = expected(where, who, needs)
    assert answer.status_code in (wanted if isinstance(wanted, tuple) else (wanted,)), answer.data[:300]
    if answer.status_code == 401:
        assert answer.headers["WWW-Authenticate"].startswith("Bearer")
    if answer.status_code in (401, 403) and path.startswith("/api"):
        models.Problem.model_validate(answer.json)
    answer.close()


def rules(team, under_api):
    return {
        (method, rule.rule)
        for rule in team["open"].application.url_map.iter_rules()
        for method in rule.methods - {"HEAD", "OPTIONS"}
        if rule.rule.startswith("/api/") == under_api
    }


def test_the_table_has_every_endpoint(team):
    in_table = {
        (
            method,
            re.sub(r"/stars/\d", "/stars/<int:star_id>", path)
            .replace("/changes/1", "/changes/<int:change_id>")
            .replace("EDITION", "<name>"),
        )
        for method, path, _, _ in ENDPOINTS
    }
    assert rules(team, True) == in_table


def test_all_else_only_reads_and_does_so_for_members_where_reading_is_closed(team):
    others = rules(team, False)
    assert {method for method, _ in others} == {"GET"}
    for _, rule in sorted(others):
        path = re.sub(r"<int:\w+>", "1", re.sub(r"<(path:)?\w+>", "pinlight.css", rule))
        for who in ("none", "revoked", *ROLES):
            for where in ("open", "closed"):
                answer = ask(team, where, who, "GET", path)
                refused = expected(where, who, None) == 401
                assert (answer.status_code == 401) == refused, (path, who, where)
                assert answer.status_code not in (403, 500), (path, who, where)
                answer.close()


def test_a_browser_reads_with_the_token_as_its_password_but_does_not_write(team):
    password = base64.b64encode(f"me:{team['tokens']['keeper']}".encode()).decode()
    basic = {"Authorization": f"Basic {password}"}
    assert team["closed"].get("/", headers=basic).status_code == 200
    refused = team["closed"].post("/api/v1/editions", headers=basic)
    assert refused.status_code == 401
    assert "Basic" in team["closed"].get("/").headers["WWW-Authenticate"]
    assert "Basic" not in refused.headers["WWW-Authenticate"]


@pytest.mark.parametrize("header", ["Bearer", "Bearer ", "Digest x", "nonsense", "Basic !!!"])
def test_a_header_that_is_none_is_refused(team, header):
    answer = team["open"].get("/api/v1/health", headers={"Authorization": header})
    assert answer.status_code in (400, 401)
    models.Problem.model_validate(answer.json)


def test_standings_over_http(team):
    given = ask(team, "open", "editor", "POST", "/api/v1/stars/5/standings", JUDGEMENT)
    assert given.status_code == 201
    record = models.StandingRecord.model_validate(given.json)
    assert (record.made_by, record.band, record.evidence) == ("Ed", "H", JUDGEMENT["evidence"])
    found = models.StandingsAnswer.model_validate(
        ask(team, "open", "none", "GET", "/api/v1/stars/5/standings").json
    )
    assert found.standings == [record]
    assert found.standing is None  # a judgement of one band is none of the star altogether
    models.StarAnswer.model_validate(ask(team, "open", "none", "GET", "/api/v1/stars/5").json)
    for question, status, detail in (
        ({"standing": "good", "reason": "x"}, 400, "standing is 'good'; it may be one of"),
        ({"standing": "barred"}, 400, "reason"),
        ({"standing": "barred", "reason": "x", "made_by": "Kit"}, 400, "made_by"),
    ):
        answer = ask(team, "open", "editor", "POST", "/api/v1/stars/5/standings", question)
        assert answer.status_code == status
        assert detail in answer.json["detail"]
    assert ask(team, "open", "editor", "POST", "/api/v1/stars/99999999/standings", JUDGEMENT).status_code == 404
    assert ask(team, "open", "none", "GET", f"/api/v1/stars/{2**70}/standings").status_code == 404


def test_the_change_log_over_http(team):
    ask(team, "open", "editor", "POST", "/api/v1/stars/6/standings", JUDGEMENT)
    newest = models.ChangesAnswer.model_validate(
        ask(team, "open", "none", "GET", "/api/v1/changes", {"most": 1}).json
    )
    assert [(change.made_by, change.action) for change in newest.changes] == [("Ed", "standing")]
    path = "/api/v1/stars/6/changes"
    found = models.StarChangesAnswer.model_validate(ask(team, "open", "none", "GET", path).json)
    assert [change.action for change in found.changes] == ["seed", "standing"]
    at = found.changes[0].made_utc
    then = models.StarChangesAnswer.model_validate(ask(team, "open", "none", "GET", path, {"at": at}).json).then
    assert "standing" not in then.rows
    assert then.rows["star"][0]["ra_deg"].made_by == "Pinlight"
    assert ask(team, "open", "none", "GET", path, {"at": "soon"}).status_code == 400


def test_editions_over_http(team):
    models.EditionsAnswer.model_validate(ask(team, "open", "none", "GET", "/api/v1/editions").json)
    frozen = ask(team, "open", "keeper", "POST", "/api/v1/editions")
    assert frozen.status_code == 200  # nothing that an edition holds was changed
    edition = models.EditionAnswer.model_validate(frozen.json)
    check = models.EditionCheck.model_validate(
        ask(team, "open", "none", "GET", f"/api/v1/editions/{edition.name}").json
    )
    assert check.sound
    found = ask(team, "open", "none", "GET", f"/api/v1/editions/{edition.name}/comparison").json
    assert models.ComparisonAnswer.model_validate(found).changed.count == 0
    assert ask(team, "open", "none", "GET", "/api/v1/editions/none").status_code == 404


def run(*arguments, token=None, code=0, **environment):
    result = CliRunner().invoke(main, [*arguments], env={"PINLIGHT_TOKEN": token} | environment)
    assert result.exit_code == code, result.output
    return result


@pytest.fixture
def path(seeded_path, tmp_path):
    (tmp_path / "p.db").write_bytes(seeded_path.read_bytes())
    shutil.copytree(f"{seeded_path}.editions", tmp_path / "p.db.editions", copy_function=os.link)
    return str(tmp_path / "p.db")


def test_members_by_command(path):
    assert "no members" in run("member", "list", "--db", path).stdout
    kit = run("member", "add", "Kit", "--role", "keeper", "--db", path).stdout.strip()
    assert len(kit) == 43
    refused = run("member", "add", "Ed", "--role", "editor", "--db", path, code=1)
    assert "this catalogue has members; set PINLIGHT_TOKEN to your token" in refused.stderr
    ed = json.loads(run("member", "add", "Ed", "--role", "editor", "--db", path, "--json", token=kit).stdout)[
        "token"
    ]
    refused = run("member", "list", "--db", path, code=1)
    refused = run("member", "revoke", "Kit", "--db", path, token=ed, code=1)
    assert refused.stderr.strip() == "pinlight: Ed is an editor; to revoke a member takes a keeper"
    new = run("member", "renew", "Ed", "--db", path, token=kit).stdout.strip()
    assert "not known, or was revoked" in run("member", "list", "--db", path, token=ed, code=1).stderr
    assert "Ed is reader now" in run("member", "role", "Ed", "reader", "--db", path, token=kit).stdout
    assert "the token of Ed is revoked" in run("member", "revoke", "Ed", "--db", path, token=kit).stdout
    assert "not known, or was revoked" in run("member", "list", "--db", path, token=new, code=1).stderr
    listed = json.loads(run("member", "list", "--db", path, "--json", token=kit).stdout)
    assert [(row["name"], row["role"], row["revoked_utc"] is None) for row in listed] == [
        ("Ed", "reader", False), ("Kit", "keeper", True),
    ]  # fmt: skip


def test_standings_and_changes_by_command(path):
    run("standing", "set", "tau Cet", "doubted", "--reason", "odd at K", "--band", "Ks", "--db", path)
    out = run("standing", "set", "tau Cet", "barred", "--reason", "a disc", "--evidence", "2004A&A...1",
              "--evidence", '{"excess_percent": 1.2}', "--db", path, "--json").stdout  # fmt: skip
    assert json.loads(out)["evidence"] == ["2004A&A...1", {"excess_percent": 1.2}]
    assert "tau Cet" in run("standing", "list", "--db", path).stdout
    history = run("standing", "history", "tau Cet", "--db", path).stdout
    assert "doubted [band Ks]" in history
    assert "what counts: barred" in history
    assert "standing" in run("changes", "tau Cet", "--db", path).stdout
    then = run("changes", "tau Cet", "--at", "2100-01-01", "--db", path).stdout
    assert "a disc" in then
    bad = run(
        "standing", "set", "tau Cet", "barred", "--reason", "x", "--evidence", "{oops", "--db", path, code=2
    )
    assert bad.stderr.startswith("pinlight: evidence is '{oops', which is no JSON")


def test_editions_by_command(path):
    first = json.loads(run("edition", "list", "--db", path, "--json").stdout)[0]["name"]
    assert run("edition", "check", "--db", path).stdout == f"{first}  as its hash says\n"
    assert first in run("edition", "freeze", "--db", path).stdout
    assert "changed: 0" in run("edition", "compare", first, "--db", path).stdout
    victim = next(iter((open_catalogue(path).editions_folder).glob("*/diameter_mas.npy")))
    data = victim.read_bytes()
    victim.unlink()
    victim.write_bytes(data[:-4] + b"\0\0\0\1")
    assert "its files have the hash" in run("edition", "check", "--db", path, code=1).stdout


def test_serving_elsewhere_needs_members_or_an_open_door(path):
    refused = run("serve", "--host", "0.0.0.0", "--db", path, code=2)
    assert "add --open to let anyone there read, or a member" in refused.stderr
    both = run("serve", "--open", "--members-only", "--db", path, code=2)
    assert "open and members-only are both given" in both.stderr


TABLE = "name,ra,dec,V,K,e_K\nInvented 1,150.5,20.5,5.2,3.1,0.02\nInvented 2,151.5,95,5.2,3.1,0.02\n"


def test_a_table_by_command(path, tmp_path):
    file = tmp_path / "list.csv"
    file.write_text(TABLE, encoding="utf-8")
    add = ("add", str(file), "--source", "A list", "--reference", "2020Ref", "--db", path)
    dry = run(*add, "--dry-run").stdout
    assert "Ks                    from K [mag], by name" in dry
    assert "line 3: refused: dec is 95" in dry
    done = run(*add)
    assert "2 rows: 1 stars added, 0 known, 1 refused" in done.stdout
    assert (
        (tmp_path / "list.csv.rejects.csv")
        .read_text(encoding="utf-8")
        .splitlines()[1]
        .startswith("3,dec is 95")
    )
    assert "it was in already" in run(*add).stdout
    assert json.loads(run(*add, "--json").stdout)["already"]
    assert (
        json.loads(run("star", "Invented 1", "--db", path, "--json").stdout)["diameter"]["limb_darkened_mas"]
        > 0
    )
    first = json.loads(run("edition", "list", "--db", path, "--json").stdout)[0]["name"]
    run("edition", "freeze", "--db", path)
    assert "added: 1" in run("edition", "compare", first, "--db", path).stdout
    ranked = json.loads(run("rank", "152 21", "--baseline-m", "100", "--wavelength-um", "2.2", "--db", path,
                            "--json", "--separation-max-deg", "2").stdout)  # fmt: skip
    assert "Invented 1" in [star["name"] for star in ranked["calibrators"]]


@pytest.mark.parametrize(
    ("more", "message"),
    [
        (("--map", "V"), "map is 'V'; write it as KEY=VALUE"),
        (("--map", "V=V", "--map", "V=K"), "map has V twice"),
        (("--zero-point", "V=x"), "zero-point is no number"),
        (("--zero-point", "Q=3"), "zero-point has 'Q'"),
        (("--epoch", "2"), "epoch is 2; write a year"),
        (("--match-arcsec", "0"), "match_arcsec is 0; it must lie above 0"),
        (("--source", " "), "source is empty"),
    ],
)
def test_an_impossible_intake_is_refused(path, tmp_path, more, message):
    file = tmp_path / "list.csv"
    file.write_text(TABLE, encoding="utf-8")
    refused = run("add", str(file), "--source", "A", "--reference", "B", *more, "--db", path, code=2)
    assert message in refused.stderr
    assert refused.stderr.count("\n") == 1


def test_a_table_over_http(team):
    question = {"table": TABLE, "source": "Posted", "reference": "2020Post"}
    dry = ask(team, "open", "editor", "POST", "/api/v1/intakes", question | {"dry_run": True})
    assert dry.status_code == 200
    assert models.IntakeAnswer.model_validate(dry.json).preview["mapping"]["columns"]["V"]["column"] == "V"
    done = ask(team, "open", "editor", "POST", "/api/v1/intakes", question)
    assert done.status_code == 201
    answer = models.IntakeAnswer.model_validate(done.json)
    assert (answer.rows, answer.added, answer.rejected) == (2, 1, 1)
    assert answer.rejects[0].reason == "dec is 95; it must lie between -90 and 90 deg"
    again = ask(team, "open", "editor", "POST", "/api/v1/intakes", question)
    assert (again.status_code, again.json["already"]) == (200, True)
    bad = ask(team, "open", "editor", "POST", "/api/v1/intakes", question | {"table": "a,b\n1,2\n"})
    assert bad.status_code == 400
    assert "no column is ra_deg" in bad.json["detail"]


def test_a_copy_by_command(path, tmp_path):
    out = run("copy", path, str(tmp_path / "copy.db")).stdout
    assert out == "copied 74733 stars, 1 changes, 1 editions\n"
    assert run("edition", "check", "--db", str(tmp_path / "copy.db")).stdout.endswith("as its hash says\n")
    assert "name another place" in run("copy", path, path, code=2).stderr


def test_bundles_by_command(path, tmp_path):
    run("standing", "set", "tau Cet", "barred", "--reason", "a disc", "--db", path)
    bundle = tmp_path / "ours.jsonl"
    run("standing", "export", "--output", str(bundle), "--db", path)
    assert run("standing", "export", "--db", path).stdout == bundle.read_text(encoding="utf-8")
    run("copy", path, str(tmp_path / "other.db"))
    other = str(tmp_path / "other.db")
    assert run("standing", "import", str(bundle), "--db", other).stdout == "0 standings added, 1 known\n"
    run("standing", "set", "tau Cet", "vouched", "--reason", "no disc", "--db", other)
    run("standing", "export", "--output", str(bundle), "--db", other)
    out = run("standing", "import", str(bundle), "--db", path).stdout
    assert "1 standings added, 1 known" in out
    assert "tau Cet: both are kept, theirs counts" in out
    assert "cannot read" in run("standing", "import", str(tmp_path / "none"), "--db", path, code=2).stderr


def test_corrections_over_http_and_by_command(team, path):
    merged = ask(team, "open", "keeper", "POST", "/api/v1/stars/21/mergers", {"into_id": 20})
    change = models.CorrectionAnswer.model_validate(merged.json).change_id
    assert ask(team, "open", "none", "GET", "/api/v1/stars/21").json["star_id"] == 20
    undone = ask(team, "open", "keeper", "POST", f"/api/v1/changes/{change}/undo")
    assert undone.status_code == 201
    assert ask(team, "open", "none", "GET", "/api/v1/stars/21").json["star_id"] == 21
    assert ask(team, "open", "keeper", "POST", f"/api/v1/changes/{2**70}/undo").status_code == 404
    out = run("merge", "21", "20", "--db", path).stdout
    assert "21 is part of 20 now" in out
    assert "is undone" in run("undo", re.search(r"undo (\d+)", out)[1], "--db", path).stdout
    assert "it was so already" in run("prefer", "tau Cet", "V", "--db", path).stdout
    refused = run("split", "tau Cet", "--source", "none", "--name", "X 1", "--db", path, code=2)
    assert "the catalogue has no such source" in refused.stderr

import json

import pytest

import pinlight as pl
from pinlight.faces import models
from pinlight.faces.http import create_app


@pytest.fixture(scope="module")
def client(catalogue):
    return create_app(catalogue).test_client()


def get(client, path, **parameters):
    return client.get(f"/api/v1/{path}", query_string=parameters)


def test_a_ranking_over_http_is_that_of_the_library(client, catalogue):
    answer = get(client, "rankings", target="tau Cet", array="north", mode="H", stations="Ash, Rowan", best=3)
    assert answer.status_code == 200
    ranking = pl.rank(catalogue, "tau Cet", array="north", mode="H", stations=["Ash", "Rowan"], best=3)
    assert answer.json == json.loads(json.dumps(ranking.to_dict()))
    models.RankingAnswer.model_validate(answer.json)


def test_every_parameter_reaches_the_ranking(client):
    answer = get(
        client, "rankings", target="150 20", baseline_m=120, wavelength_um=2.2, separation_max_deg=7,
        magnitude_max=6, v2_min=0.7, judge="worst", best=4,
    ).json  # fmt: skip
    assert answer["parameters"] == {
        "separation_max_deg": 7.0, "magnitude_max": 6.0, "v2_min": 0.7, "judge": "worst", "best": 4,
    }  # fmt: skip
    assert len(answer["calibrators"]) == 4
    for star in answer["calibrators"]:
        assert star["separation_deg"] <= 7
        assert star["magnitudes"]["Ks"]["value"] <= 6
        assert star["visibility"]["v2_min"] >= 0.7
    again = get(
        client, "rankings", target="150 20", baseline_m=120, wavelength_um=2.2, edition=answer["edition"]
    )
    assert again.json["edition"] == answer["edition"]


def test_a_posted_target_may_be_the_callers_own(client):
    target = {
        "name": "Winter Kiln",
        "ra_deg": 151.6,
        "dec_deg": 18.3,
        "magnitudes": {"H": 2.3},
        "diameter_mas": 1.9,
    }
    answer = client.post("/api/v1/rankings", json={"target": target, "array": "north", "mode": "H"})
    assert answer.status_code == 200
    assert answer.json["target"]["magnitude"] == 2.3
    assert answer.json["calibrators"][0]["budget_percent"]["brightness"] is not None
    named = client.post(
        "/api/v1/rankings",
        json={"target": "tau Cet", "array": "north", "mode": "H", "stations": ["Ash", "Birch"]},
    )
    assert named.json["setup"]["stations"] == ["Ash", "Birch"]


def test_an_empty_result_is_an_answer(client):
    answer = get(
        client, "rankings", target="tau Cet", baseline_m=100, wavelength_um=1.6, separation_max_deg=0.001
    )
    assert answer.status_code == 200
    assert answer.json["calibrators"] == []
    assert answer.json["excluded"]["too_far"] > 70_000


@pytest.mark.parametrize(
    ("parameters", "status", "detail"),
    [
        ({}, 400, "target is missing"),
        ({"target": "tau Cet"}, 400, "array is missing; give an array"),
        ({"target": "tau Ceet", "array": "north", "mode": "H"}, 404, "did you mean tau Cet"),
        ({"target": "mu Sco", "array": "north", "mode": "H"}, 400, "may be any of mu1 Sco, mu2 Sco"),
        ({"target": "10 95", "array": "north", "mode": "H"}, 400, "dec_deg is 95"),
        ({"target": "tau Cet", "array": "/etc/passwd", "mode": "H"}, 404, "it may be one of north, south"),
        ({"target": "tau Cet", "array": "north", "mode": "Z"}, 400, "mode is 'Z'; Quillstone has H, K, red"),
        (
            {"target": "tau Cet", "baseline_m": "far", "wavelength_um": 2},
            400,
            "baseline_m is 'far': input should be",
        ),
        (
            {"target": "tau Cet", "baseline_m": "nan", "wavelength_um": 2},
            400,
            "baseline_m is 'nan': input should be a finite",
        ),
        ({"target": "tau Cet", "baseline_m": 100, "wavelength_um": 2200}, 400, "(2200 nm is 2.2 um)"),
        (
            {"target": "tau Cet", "array": "north", "mode": "H", "colour": "red"},
            400,
            "colour is not a known key",
        ),
        ({"target": "tau Cet", "array": "north", "mode": "H", "edition": "old"}, 404, "edition is 'old'"),
        (
            {"target": ["tau Cet", "HD 1"], "array": "north", "mode": "H"},
            400,
            "target is given 2 times; give it once",
        ),
        ({"target": "tau Cet", "array": "north", "mode": "H", "best": 10**30}, 400, "best is"),
    ],
)
def test_bad_questions_get_problem_details(client, parameters, status, detail):
    answer = get(client, "rankings", **parameters)
    assert answer.status_code == status, answer.json
    assert answer.content_type == "application/problem+json"
    problem = models.Problem.model_validate(json.loads(answer.data))
    assert problem.status == status
    assert detail in problem.detail


@pytest.mark.parametrize(
    ("body", "kind", "status"),
    [
        (b"{", "application/json", 400),
        (b"[]", "application/json", 400),
        (b"{}", "text/plain", 415),
        (b'{"target": {"ra_deg": 10, "dec_deg": 95}, "array": "north", "mode": "H"}', "application/json", 400),
        (b'{"target": {"ra_deg": "x", "dec_deg": 5}, "array": "north"}', "application/json", 400),
        (b'{"target": "' + b"x" * 1_100_000 + b'"}', "application/json", 413),
    ],
)
def test_bad_bodies_get_problem_details(client, body, kind, status):
    answer = client.post("/api/v1/rankings", data=body, content_type=kind)
    assert answer.status_code == status
    models.Problem.model_validate(json.loads(answer.data))


@pytest.mark.parametrize(
    ("body", "detail"),
    [
        (b"{", "the body is not JSON"),
        (b"[" * 50_000, "the body is nested too deeply"),
        (b'{"target": {"ra_deg": 10}, "array": "north"}', "target.dec_deg is missing"),
        (b'{"target": {"ra_deg": NaN, "dec_deg": 5}, "array": "north"}', "target.ra_deg is nan"),
        (rb'{"target": "\ud800", "array": "north", "mode": "H"}', "half a character"),
        (
            b'{"target": {"ra_deg": 1, "dec_deg": 2, "name": "\\u0007"}, "array": "north", "mode": "H"}',
            "it must be printable",
        ),
        (b'{"target": "' + b"1" * 100_000 + b'", "array": "north", "mode": "H"}', "at most 200 characters"),
    ],
)
def test_what_is_wrong_with_a_body_is_told(client, body, detail):
    answer = client.post("/api/v1/rankings", data=body, content_type="application/json")
    assert answer.status_code == 400
    assert detail in json.loads(answer.data)["detail"]
    assert len(answer.data) < 1000


def test_a_ranking_with_a_clock_over_http(client, catalogue):
    parameters = {
        "target": "150 20",
        "array": "north",
        "mode": "H",
        "from": "2026-12-02T01:00Z",
        "to": "2026-12-02T04:00Z",
    }
    answer = get(client, "rankings", **parameters, **{"with": "HD 88009, HD 87646"})
    assert answer.status_code == 200, answer.json
    models.RankingAnswer.model_validate(answer.json)
    ranking = pl.rank(
        catalogue, "150 20", array="north", mode="H", from_="2026-12-02T01:00Z", to="2026-12-02T04:00Z",
        with_=["HD 88009", "HD 87646"],
    )  # fmt: skip
    assert answer.json == json.loads(json.dumps(ranking.to_dict()))
    posted = client.post("/api/v1/rankings", json=parameters | {"with": ["HD 88009", "HD 87646"]})
    assert posted.json == answer.json


def test_a_plan_over_http(client):
    targets = [
        {
            "name": "Slow Ember",
            "ra_deg": 61.9,
            "dec_deg": 27.3,
            "magnitudes": {"H": 3.9},
            "priority": 1,
            "repeats": 2,
        },
        {"name": "Never up", "ra_deg": 61.9, "dec_deg": -67.3},
    ]
    answer = client.post(
        "/api/v1/plans", json={"targets": targets, "array": "north", "mode": "H", "night": "2026-12-01"}
    )
    assert answer.status_code == 200, answer.json
    models.PlanAnswer.model_validate(answer.json)
    assert {block["target"] for block in answer.json["blocks"]} == {"Slow Ember"}
    assert answer.json["unscheduled"] == [{"target": "Never up", "reason": "it never rises above 30 deg"}]


@pytest.mark.parametrize(
    ("change", "detail"),
    [
        ({"targets": []}, "targets is []"),
        ({"targets": [{"ra_deg": 1}]}, "dec_deg of a target is missing"),
        ({"targets": [{"ra_deg": 1, "dec_deg": 95}]}, "dec_deg is 95"),
        ({"targets": [{"ra_deg": 1, "dec_deg": 5, "priority": 0}]}, "priority of"),
        ({"night": None}, "night is missing"),
        ({"night": "2026-12-01", "from": "2026-12-01", "to": "2026-12-02"}, "night and from are both given"),
        ({"time_limit_s": 1e9}, "time_limit_s is 1000000000.0"),
        ({"colour": 1}, "colour is not a known key"),
    ],
)
def test_a_bad_plan_is_told(client, change, detail):
    body = {"targets": [{"ra_deg": 60, "dec_deg": 28}], "array": "north", "mode": "H", "night": "2026-12-01"}
    answer = client.post("/api/v1/plans", json=body | change)
    assert answer.status_code == 400, answer.json
    assert detail in json.loads(answer.data)["detail"]


def test_stars_by_name_and_by_place(client):
    by_name = get(client, "stars", name="tau ceti").json
    models.StarsAnswer.model_validate(by_name)
    star_id = by_name["stars"][0]["star_id"]
    around = get(client, "stars", ra_deg=26.017, dec_deg=-15.937, radius_deg=2, limit=5).json
    models.StarsAnswer.model_validate(around)
    assert around["stars"][0]["star_id"] == star_id
    assert around["count"] > len(around["stars"]) == 5
    apart = [star["separation_deg"] for star in around["stars"]]
    assert apart == sorted(apart)
    one = get(client, f"stars/{star_id}")
    models.StarAnswer.model_validate(one.json)
    assert "HD 10700" in one.json["identifiers"]


@pytest.mark.parametrize(
    ("path", "parameters", "status", "detail"),
    [
        ("stars", {}, 400, "name is missing; give a name, or ra_deg and dec_deg"),
        ("stars", {"ra_deg": 10}, 400, "dec_deg is missing"),
        ("stars", {"ra_deg": 10, "dec_deg": 95}, 400, "dec_deg is 95"),
        ("stars", {"ra_deg": 10, "dec_deg": 5, "radius_deg": 0}, 400, "radius_deg is '0'"),
        ("stars", {"ra_deg": 10, "dec_deg": 5, "name": "x"}, 400, "both given"),
        ("stars/99999999", {}, 404, "there is no such star"),
        ("stars/99999999999999999999999", {}, 404, "there is no such star"),
        ("nothing", {}, 404, ""),
    ],
)
def test_bad_star_questions(client, path, parameters, status, detail):
    answer = get(client, path, **parameters)
    assert answer.status_code == status
    assert detail in json.loads(answer.data)["detail"]


def test_arrays_health_and_methods(client, catalogue):
    arrays = get(client, "arrays").json
    models.ArraysAnswer.model_validate(arrays)
    assert [array["key"] for array in arrays["arrays"]] == ["north", "south"]
    health = get(client, "health").json
    models.HealthAnswer.model_validate(health)
    assert health["edition"] == catalogue.editions()[0]["name"]
    wrong = client.delete("/api/v1/rankings")
    assert wrong.status_code == 405
    assert "GET" in wrong.headers["Allow"]


def test_an_unreadable_catalogue_is_503(seeded_path, tmp_path):
    copy = tmp_path / "copy.db"
    copy.write_bytes(seeded_path.read_bytes())  # without its editions
    opened = pl.open_catalogue(str(copy))
    answer = create_app(opened).test_client().get("/api/v1/health")
    assert answer.status_code == 503
    assert "is missing or damaged" in json.loads(answer.data)["detail"]
    opened.close()


def test_the_openapi_description_covers_every_route(client):
    described = get(client, "openapi.json").json
    assert described["openapi"].startswith("3.1")
    app = client.application
    routes = {
        (rule.rule.replace("<int:", "{").replace("<", "{").replace(">", "}"), method.lower())
        for rule in app.url_map.iter_rules()
        for method in rule.methods - {"HEAD", "OPTIONS"}
        if rule.rule.startswith("/api/") and not rule.rule.endswith("openapi.json")
    }
    assert routes == {(path, method) for path, methods in described["paths"].items() for method in methods}
    parameters = {p["name"] for p in described["paths"]["/api/v1/rankings"]["get"]["parameters"]}
    assert parameters == {
        "target", "array", "stations", "mode", "baseline_m", "wavelength_um", "separation_max_deg",
        "magnitude_max", "v2_min", "judge", "best", "edition", "night", "at", "from", "to", "with", "format",
    }  # fmt: skip
    text = json.dumps(described)
    for reference in {part.split('"')[0] for part in text.split("#/components/schemas/")[1:]}:
        assert reference in described["components"]["schemas"]


def test_every_answer_is_guarded(client):
    answer = client.get("/")
    policy = answer.headers["Content-Security-Policy"]
    assert "default-src 'none'" in policy
    assert "unsafe" not in policy
    assert answer.headers["X-Content-Type-Options"] == "nosniff"

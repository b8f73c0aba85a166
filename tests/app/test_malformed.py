"""Malformed links and bodies: a clear error in page and JSON alike, nothing computed, no traceback."""

import html
import json
from typing import Any

import pytest

from tests.running import RunningServer

# (query, field that the error names, its code)
LINKS = [
    ("spin=3", "spin", "unknown-key"),
    ("Spins=3", "Spins", "unknown-key"),
    ("colour=red", "colour", "unknown-key"),
    ("utm_source=mail", "utm_source", "unknown-key"),
    ("coupling_as=single", "coupling_as", "unknown-key"),
    ("__proto__=1", "__proto__", "unknown-key"),
    ("start=0.1", "start", "unknown-key"),
    ("spins=1&spins=2", "spins", "repeated-key"),
    ("spins=2&spins=2", "spins", "repeated-key"),
    ("spins", "spins", "no-value"),
    ("spins=", "spins", "not-a-whole-number"),
    ("spins=0", "spins", "out-of-range"),
    ("spins=-4", "spins", "out-of-range"),
    ("spins=5001", "spins", "out-of-range"),
    ("spins=1e3", "spins", "not-a-whole-number"),
    ("spins=2.5", "spins", "not-a-whole-number"),
    ("spins=ten", "spins", "not-a-whole-number"),
    ("spins=99999999999999999999", "spins", "not-a-whole-number"),
    ("spins=%D9%A2", "spins", "not-a-whole-number"),
    ("mode=0", "mode", "out-of-range"),
    ("mode=-1", "mode", "out-of-range"),
    ("mode=1e-7", "mode", "out-of-range"),
    ("mode=nan", "mode", "not-a-number"),
    ("mode=inf", "mode", "not-a-number"),
    ("mode=Infinity", "mode", "not-a-number"),
    ("splitting=NaN", "splitting", "not-a-number"),
    ("splitting=-inf", "splitting", "not-a-number"),
    ("splitting=1e308", "splitting", "out-of-range"),
    ("splitting=1e999", "splitting", "not-finite"),
    ("splitting=1_0", "splitting", "not-a-number"),
    ("splitting=0x10", "splitting", "not-a-number"),
    ("splitting=1&detuning=0", "detuning", "both-given"),
    ("detuning=0&splitting=1", "detuning", "both-given"),
    ("coupling=-0.1", "coupling", "out-of-range"),
    ("coupling=0,5", "coupling", "not-a-number"),
    ("coupling=1+1", "coupling", "not-a-number"),
    ("coupling=1e308", "coupling", "out-of-range"),
    ("ratio=-1", "ratio", "out-of-range"),
    ("bias=2e6", "bias", "out-of-range"),
    ("along=time", "along", "unknown-choice"),
    ("along=couplings", "along", "unknown-choice"),
    ("along=", "along", "unknown-choice"),
    ("from=0.5&to=0.5", "to", "empty-range"),
    ("from=0.5&to=0.1", "to", "empty-range"),
    ("from=9", "from", "empty-range"),
    ("from=-1", "from", "out-of-range"),
    ("along=mode&from=0", "from", "out-of-range"),
    ("along=spins&from=1.5", "from", "not-a-whole-number"),
    ("along=spins&to=9000", "to", "out-of-range"),
    ("along=spins&points=200", "points", "too-many-points"),
    ("from=1&to=1.0000000000000002", "points", "too-many-points"),
    ("points=1", "points", "out-of-range"),
    ("points=0", "points", "out-of-range"),
    ("points=100000", "points", "out-of-range"),
    ("points=-5", "points", "out-of-range"),
    ("each=spins", "each", "bad-family"),
    ("each=spins:", "each", "not-a-number"),
    ("each=spins:5,5", "each", "repeated-value"),
    ("each=spins:5,6000", "each", "out-of-range"),
    ("each=spins:1.5", "each", "not-a-whole-number"),
    ("each=coupling:1,2", "each", "same-quantity"),
    ("along=splitting&each=detuning:1,2", "each", "same-quantity"),
    ("each=ratio:1,2,3,4,5,6,7,8,9", "each", "bad-family"),
    ("each=colour:1", "each", "unknown-choice"),
    ("each=ratio:nan", "each", "not-a-number"),
    ("along=coupling-over-critical&splitting=0", "along", "no-critical-coupling"),
    ("levels=0", "levels", "out-of-range"),
    ("levels=41", "levels", "out-of-range"),
    ("tol=0", "tol", "out-of-range"),
    ("tol=1", "tol", "out-of-range"),
    ("need=0", "need", "out-of-range"),
    ("tail=1", "tail", "out-of-range"),
    ("unit=GHz", "unit", "unknown-choice"),
    ("frame=lab", "frame", "unknown-choice"),
    ("energies=relative", "energies", "unknown-choice"),
    ("overlay=yes", "overlay", "unknown-choice"),
    ("zoom=1", "zoom", "bad-interval"),
    ("zoom=2:1", "zoom", "bad-interval"),
    ("zoom=a:b", "zoom", "not-a-number"),
    ("at=here", "at", "not-a-number"),
    ("title=" + "x" * 121, "title", "too-long"),
    ("title=%3Cscript%3Ealert(1)%3C/script%3E" + "x" * 120, "title", "too-long"),
    ("title=two%0Alines", "title", "control-characters"),
    ("title=%00", "title", "control-characters"),
    ("title=%ff%fe", "title", "not-utf-8"),
    ("note=" + "n" * 2001, "note", "too-long"),
    ("across=mode", "across", "one-axis-only"),
    ("rows=20", "rows", "one-axis-only"),
    ("v=2", "v", "unknown-version"),
    ("v=new", "v", "unknown-version"),
    ("%3Cscript%3Ealert(1)%3C/script%3E=1", "<script>alert(1)</script>", "unknown-key"),
    ("spins=%3Cscript%3Ealert(1)%3C/script%3E", "spins", "not-a-whole-number"),
    ("stored=abc", "stored", "bad-stored-link"),
]

# each with the field and the code of its error
BODIES: list[tuple[str, str | None, str]] = [
    ('{"spins": "20"}', "spins", "wrong-type"),
    ('{"spins": true}', "spins", "wrong-type"),
    ('{"spins": [20]}', "spins", "wrong-type"),
    ('{"spins": {}}', "spins", "wrong-type"),
    ('{"spins": 2.5}', "spins", "not-a-whole-number"),
    ('{"spins": -3}', "spins", "out-of-range"),
    ('{"spins": 1' + "0" * 400 + "}", "spins", "out-of-range"),
    ('{"mode": NaN}', "body", "not-finite"),
    ('{"mode": Infinity}', "body", "not-finite"),
    ('{"mode": -Infinity}', "body", "not-finite"),
    ('{"mode": 1e999}', "mode", "not-finite"),
    ('{"mode": 1e308}', "mode", "out-of-range"),
    ('{"splitting": 1, "detuning": 1}', "detuning", "both-given"),
    ('{"spins": 1, "spins": 2}', "spins", "repeated-key"),
    ('{"along": 3}', "along", "wrong-type"),
    ('{"title": 3}', "title", "wrong-type"),
    ('{"title": "' + "x" * 121 + '"}', "title", "too-long"),
    ('{"title": "\\ud800"}', "title", "control-characters"),
    ('{"each": {"name": "spins"}}', "each", "bad-family"),
    ('{"each": {"name": "spins", "values": 5}}', "each", "bad-family"),
    ('{"each": {"name": 5, "values": [5]}}', "each", "unknown-choice"),
    ('{"each": {"name": "spins", "values": ["5"]}}', "each", "wrong-type"),
    ('{"each": {"name": "spins", "values": []}}', "each", "bad-family"),
    ('{"zoom": [1]}', "zoom", "bad-interval"),
    ('{"zoom": ["a", "b"]}', "zoom", "wrong-type"),
    ('{"points": 1e9}', "points", "out-of-range"),
    ('{"spinz": 4}', "spinz", "unknown-key"),
    ('{"rows": 4}', "rows", "one-axis-only"),
    ('{"v": 7}', "v", "unknown-version"),
    ('{"v": true}', "v", "unknown-version"),
    ('{"link": 5}', "link", "wrong-type"),
    ('{"link": "/sweep?spin=5"}', "spin", "unknown-key"),
    ('{"link": "/chart?spins=5"}', "link", "unknown-page"),
    ('{"link": "/sweep?stored=' + "0" * 32 + '"}', "stored", "unknown-link"),
    ('{"link": "/sweep", "spins": 3}', "link", "unknown-key"),
    ("[]", "body", "bad-json"),
    ("3", "body", "bad-json"),
    ("null", "body", "bad-json"),
    ("", "body", "bad-json"),
    ("{", "body", "bad-json"),
    ("\x00\x01", "body", "bad-json"),
    ("[" * 20000, "body", "bad-json"),
    ('{"note": "' + "n" * 70000 + '"}', "body", "body-too-large"),
]


@pytest.fixture(autouse=True)
def _nothing_happens(server: RunningServer) -> Any:
    before = server.counts()
    yield
    after = server.counts()
    assert after["jobs_started"] == before["jobs_started"]
    assert "Traceback" not in server.log.read_text()


@pytest.mark.parametrize(("query", "field", "code"), LINKS, ids=[query[:40] for query, _, _ in LINKS])
def test_malformed_links(server: RunningServer, query: str, field: str, code: str) -> None:
    answers = [
        server.client.get(f"/api/sweep?{query}"),
        server.client.get(f"/api/sweep.csv?{query}"),
        server.client.get(f"/api/sweep.py?{query}"),
    ]
    for answer in answers:
        assert answer.status_code == 422
        assert answer.headers["content-type"] == "application/json"
        error = answer.json()["error"]
        assert set(error) == {"code", "message", "field", "value", "allowed"}
        assert (error["code"], error["field"]) == (code, field)
        assert error["message"]
        assert error["allowed"] or code == "unknown-link"
    page = server.client.get(f"/sweep?{query}", headers={"accept": "text/html"})
    assert page.status_code == 422
    assert page.headers["content-type"].startswith("text/html")
    assert "<script>alert" not in page.text
    shown = html.unescape(page.text)
    assert error["message"] in shown
    assert field in shown
    assert str(error["allowed"]) in shown


@pytest.mark.parametrize(("body", "field", "code"), BODIES, ids=[body[:40] for body, _, _ in BODIES])
def test_malformed_bodies(server: RunningServer, body: str, field: str | None, code: str) -> None:
    answer = server.client.post(
        "/api/jobs",
        content=body.encode("utf-8", "surrogatepass"),
        headers={"content-type": "application/json"},
    )
    assert answer.status_code in {400, 404, 413, 422}
    error = answer.json()["error"]
    assert set(error) == {"code", "message", "field", "value", "allowed"}
    assert (error["code"], error["field"]) == (code, field)
    assert error["message"]
    json.dumps(error, allow_nan=False)


def test_near_names_are_offered(server: RunningServer) -> None:
    error = server.client.get("/api/sweep?splittin=2").json()["error"]
    assert "'splitting'" in error["message"]
    assert "spins" in error["allowed"]


def test_form_bodies_answer_in_the_same_shape(server: RunningServer) -> None:
    for body in ({"spins": "many"}, {"spins": 4}, {"spinz": "4"}, {"coupling": "1.000,0"}):
        answer = server.client.post("/api/link", json=body)
        assert answer.status_code == 422
        assert set(answer.json()["error"]) == {"code", "message", "field", "value", "allowed"}


def test_other_content_types_are_refused(server: RunningServer) -> None:
    for kind in ("text/plain", "application/x-www-form-urlencoded", "multipart/form-data; boundary=x", ""):
        answer = server.client.post("/api/jobs", content=b'{"spins": 4}', headers={"content-type": kind})
        assert answer.status_code == 415
        assert answer.json()["error"]["code"] == "not-json"


def test_overlong_addresses_are_refused(server: RunningServer) -> None:
    assert server.client.get("/api/sweep?note=" + "n" * 40000).status_code == 414
    assert server.client.get("/sweep?note=" + "n" * 40000, headers={"accept": "text/html"}).status_code == 414


def test_scripts_in_titles_are_kept_as_text(server: RunningServer) -> None:
    page = server.client.get(
        "/sweep?title=%3Cscript%3Ealert(1)%3C/script%3E", headers={"accept": "text/html"}
    )
    assert page.status_code == 200
    assert "<script>alert" not in page.text

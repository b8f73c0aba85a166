"""The cutoff desk: links, refusals, one result with four faces, needs against plain diagonalisation."""

import csv
import html
import io
import json
from concurrent.futures import ThreadPoolExecutor
from pathlib import Path
from typing import Any

import numpy as np
import pytest
from hypothesis import assume, given
from hypothesis import strategies as st

from app import cutoff_plan, identity, kinds, links
from app.cutoff_exports import csv_of, sizes_csv_of
from app.cutoff_sheets import CUTOFF_KEYS, CutoffSheet
from app.cutoff_words import bytes_words, levels_words, whole_words
from app.cutoff_work import margin_cutoffs
from app.errors import SheetError
from app.figure_cutoff import picture
from tests.app.test_exports import comparable, compute
from tests.app.test_links import sheets
from tests.running import RunningServer, ServerFactory

OLD_LINKS = json.loads(Path(__file__).with_name("old_cutoff_links.json").read_text())
QUERIES = [
    "spins=5&points=9&stated=9",
    "spins=3&points=5&each=ratio:0,0.5,1&stated=4&title=Three",
    "spins=3&points=5&across=bias&rows=3&high=0.4&stated=5",
    "along=spins&spins=6&coupling=0.7&asked=boson_number,tail",
    "spins=3&points=4&ensemble=distinguishable&quanta=0.5&stated=6",
    "spins=2&points=3&ensemble=collective&temperature=0.8&asked=tail",
    "spins=2&points=3&start=coherent&start-quanta=2&start-periods=1&stated=5",
]


def question(query: str) -> CutoffSheet:
    return links.cutoff_from_pairs(links.split_query(query))


def own_value(name: str) -> st.SearchStrategy[Any]:
    key = CUTOFF_KEYS[name]
    if key.kind == "integer":
        return st.integers(int(key.low), min(int(key.high), 50))
    if key.kind == "real":
        return st.floats(key.low, key.high, allow_nan=False) | st.sampled_from([0.5, 0.25, 2.0])
    if key.kind == "names":
        return st.lists(st.sampled_from(key.choices), min_size=1, unique=True)
    return st.sampled_from(key.choices)


@st.composite
def questions(draw: st.DrawFn) -> CutoffSheet:
    """Draw any cutoff question that may be asked."""
    sheet = draw(sheets())
    names = draw(st.lists(st.sampled_from(sorted(CUTOFF_KEYS)), unique=True, max_size=4))
    try:
        return CutoffSheet.of(sheet.explicit() | {name: draw(own_value(name)) for name in names})
    except SheetError:
        assume(False)
        raise


@given(questions())
def test_question_to_link_to_question(asked: CutoffSheet) -> None:
    query = links.cutoff_query(asked)
    again = question(query)
    assert again == asked
    assert links.cutoff_query(again) == query
    assert links.parse_link(f"http://127.0.0.1:8150{links.cutoff_link(asked)}") == asked
    assert query.isascii()
    assert CutoffSheet.of(json.loads(json.dumps(asked.data(), allow_nan=False))) == asked


@pytest.mark.parametrize(
    ("typed", "canonical"),
    [
        ("", ""),
        ("asked=tail,gap", "asked=gap,tail"),
        ("asked=energies,gap,boson_number,order_parameter,tail", ""),
        (
            "asked=tail,boson_number,order_parameter&ensemble=collective&quanta=1",
            "ensemble=collective&quanta=1",
        ),
        ("need-gap=0.001&need-bosons=1e-2&start=none&ensemble=lowest", ""),
        ("stated=20&spins=5", "spins=5&stated=20"),
        ("stated=0", "stated=0"),
        ("across=bias&low=0&high=1&rows=21", "across=bias"),
        ("rows=5&across=spins&high=3&low=1", "across=spins&high=3&rows=5"),
        ("start=fock&start-quanta=3.0&start-periods=3", "start=fock&start-quanta=3"),
    ],
)
def test_one_spelling(typed: str, canonical: str) -> None:
    if typed.startswith("rows=5"):
        with pytest.raises(SheetError, match="too many"):
            question(typed)
        return
    assert links.cutoff_query(question(typed)) == canonical


@pytest.mark.parametrize("link", OLD_LINKS)
def test_old_links_open(link: str) -> None:
    """Links that were once passed around: they open for ever, as the same question."""
    asked = links.parse_link(link)
    assert isinstance(asked, CutoffSheet)
    assert links.cutoff_link(asked) == link
    assert {key: asked.data()[key] for key in OLD_LINKS[link]} == OLD_LINKS[link]


def test_what_is_only_shown_is_not_computed_again() -> None:
    first = question("spins=5&stated=7")
    for other in ("title=Other", "unit=kHz", "at=0.1", "zoom=0:0.2", "tol=1e-6"):
        assert identity.sheet_id(question(f"spins=5&stated=7&{other}")) == identity.sheet_id(first)
    for other in ("need=1e-4", "need-gap=1e-4", "levels=3", "start=fock", "asked=tail", "spins=6"):
        changed = "spins=6&stated=7" if other == "spins=6" else f"spins=5&stated=7&{other}"
        assert identity.sheet_id(question(changed)) != identity.sheet_id(first)
    assert identity.sheet_id(links.parse("spins=5")) != identity.sheet_id(question("spins=5"))


# (query, field that the error names, its code)
MALFORMED = [
    ("spin=3", "spin", "unknown-key"),
    ("statd=3", "statd", "unknown-key"),
    ("need-boson=1", "need-boson", "unknown-key"),
    ("point=1", "point", "unknown-key"),
    ("stated=1&stated=2", "stated", "repeated-key"),
    ("stated", "stated", "no-value"),
    ("stated=", "stated", "not-a-whole-number"),
    ("stated=-1", "stated", "out-of-range"),
    ("stated=2.5", "stated", "not-a-whole-number"),
    ("stated=100001", "stated", "out-of-range"),
    ("stated=many", "stated", "not-a-whole-number"),
    ("asked=", "asked", "nothing-named"),
    ("asked=,", "asked", "nothing-named"),
    ("asked=gap,gap", "asked", "repeated-value"),
    ("asked=gaps", "asked", "unknown-choice"),
    ("asked=gap;tail", "asked", "unknown-choice"),
    ("asked=energies&ensemble=collective&quanta=1", "asked", "not-judged"),
    ("need-gap=0", "need-gap", "out-of-range"),
    ("need-gap=1,5", "need-gap", "not-a-number"),
    ("need-bosons=nan", "need-bosons", "not-a-number"),
    ("need-order=2", "need-order", "out-of-range"),
    ("ensemble=hot", "ensemble", "unknown-choice"),
    ("ensemble=collective", "temperature", "no-temperature"),
    ("ensemble=collective&quanta=1&temperature=1", "quanta", "both-given"),
    ("quanta=1", "quanta", "no-ensemble"),
    ("temperature=1&ensemble=lowest", "temperature", "no-ensemble"),
    ("ensemble=collective&temperature=0", "temperature", "out-of-range"),
    ("start=warm", "start", "unknown-choice"),
    ("start-quanta=2", "start-quanta", "needs-another"),
    ("start-periods=2&start=none", "start-periods", "needs-another"),
    ("start=fock&start-quanta=1.5", "start-quanta", "not-a-whole-number"),
    ("start=thermal&start-quanta=-1", "start-quanta", "out-of-range"),
    ("start=thermal&start-periods=1e9", "start-periods", "out-of-range"),
    ("rows=4", "rows", "needs-another"),
    ("low=0", "low", "needs-another"),
    ("across=time", "across", "unknown-choice"),
    ("across=coupling", "across", "same-quantity"),
    ("across=coupling-over-critical", "across", "same-quantity"),
    ("across=bias&each=spins:1,2", "each", "map-or-family"),
    ("across=bias&low=1&high=1", "high", "empty-range"),
    ("across=spins&low=0.5", "low", "not-a-whole-number"),
    ("across=mode&low=0", "low", "out-of-range"),
    ("across=bias&rows=1", "rows", "out-of-range"),
    ("across=bias&rows=2001", "rows", "too-many-points"),
    ("across=spins&spins=3&rows=9", "rows", "too-many-points"),
    ("spins=0", "spins", "out-of-range"),
    ("from=9", "from", "empty-range"),
    ("v=2", "v", "unknown-version"),
]


@pytest.mark.parametrize(("query", "field", "code"), MALFORMED)
def test_malformed_links(server: RunningServer, query: str, field: str, code: str) -> None:
    before = server.counts()["jobs_started"]
    answer = server.client.get(f"/api/cutoff?{query}")
    assert answer.status_code == 422
    error = answer.json()["error"]
    assert (error["field"], error["code"]) == (field, code)
    assert error["message"]
    assert error["allowed"]
    page = server.client.get(f"/cutoff?{query}", headers={"Accept": "text/html"})
    assert page.status_code == 422
    assert error["message"] in html.unescape(page.text)
    assert server.client.post("/api/jobs", json={"link": f"/cutoff?{query}"}).json()["error"]["code"] == code
    assert server.counts()["jobs_started"] == before


def test_a_sweep_still_has_one_axis(server: RunningServer) -> None:
    assert server.client.get("/api/sweep?across=bias").json()["error"]["code"] == "one-axis-only"
    assert server.client.get("/api/sweep?stated=3").json()["error"]["code"] == "unknown-key"


@pytest.mark.parametrize(
    ("query", "field"),
    [
        ("spins=400&ensemble=distinguishable&quanta=1&points=2", "spins"),
        ("need=1&points=2", "need"),
    ],
)
def test_what_the_solver_refuses_names_the_key(server: RunningServer, query: str, field: str) -> None:
    answer = server.client.get(f"/api/cutoff?{query}")
    assert answer.status_code == 422
    assert answer.json()["error"]["field"] == field


def test_too_expensive_is_refused_before_anything_runs(server: RunningServer) -> None:
    server.wait_until(lambda: server.counts()["workers_busy"] == 0)
    before = server.counts()["chunks_computed"]
    answer = server.client.get("/api/cutoff?spins=5000&points=2001&from=1&to=3&levels=40")
    assert answer.status_code == 422
    assert answer.json()["error"]["code"] in {"too-expensive", "too-much-memory"}
    assert server.counts()["chunks_computed"] == before


# -- one result, four faces -------------------------------------------------------------------------


@pytest.mark.parametrize("query", QUERIES)
def test_command_line_and_server_agree_to_the_last_bit(
    server: RunningServer, query: str, tmp_path: Path
) -> None:
    answer = server.client.get(f"/api/cutoff?{query}")
    assert answer.status_code == 200, answer.text
    served = answer.json()
    assert served["complete"]
    assert served["summary"]["settled"] == len(served["x"]) == question(query).total
    ended = compute(f"http://elsewhere:8150/cutoff?{query}", tmp_path / "x.json", "--workers", "1")
    assert ended.returncode == 0, ended.stderr
    offline = json.loads((tmp_path / "x.json").read_text())
    assert json.dumps(comparable(offline)) == json.dumps(comparable(served))


@pytest.mark.parametrize("query", QUERIES[:3])
def test_tables_agree_with_json(server: RunningServer, query: str, tmp_path: Path) -> None:
    result = server.client.get(f"/api/cutoff?{query}").json()
    answer = server.client.get(f"/api/cutoff.csv?{query}")
    assert answer.headers["content-type"].startswith("text/csv")
    assert "attachment" in answer.headers["content-disposition"]
    assert answer.text == csv_of(result)
    rows = read_table(answer.text)
    assert len(rows) == len(result["x"])
    for point, row in enumerate(rows):
        assert float(row[result["axis"]["name"]]) == result["x"][point]
        assert int(row["covering"]) == result["covering"][point]
        assert row["deciding"] == result["deciding"][point]
        assert (row["stated_enough"] == "true") == result["stated"]["enough"][point]
        for quantity, errors in result["stated"]["error"].items():
            cell = row[f"stated_error_{quantity}"]
            assert (None if cell == "" else float(cell)) == errors[point]
    ended = compute(f"/cutoff?{query}", tmp_path / "x.csv")
    assert ended.returncode == 0, ended.stderr
    assert f"{len(rows)} points" in ended.stdout
    offline = (tmp_path / "x.csv").read_text(encoding="utf-8")
    assert read_table(offline) == rows


def read_table(text: str) -> list[dict[str, str]]:
    lines = [line for line in text.splitlines(keepends=True) if not line.startswith("#")]
    return list(csv.DictReader(io.StringIO("".join(lines), newline=""), strict=True))


def test_the_table_of_sizes(server: RunningServer) -> None:
    query = "spins=5&points=9&stated=9"
    result = server.client.get(f"/api/cutoff?{query}").json()
    answer = server.client.get(f"/api/cutoff/sizes.csv?{query}")
    assert answer.text == sizes_csv_of(result)
    assert answer.text.count("\r\n") == len(answer.text.splitlines())
    rows = list(csv.DictReader(io.StringIO(answer.text, newline=""), strict=True))
    assert [row["treatment"] for row in rows] == ["collective", "parity", "product"] * 2
    for row in rows:
        states = int(row["number_states"])
        assert states == int(row["cutoff"]) + 1
        # (N + 1) or 2^N spin states times M + 1 number states; one parity has half of them, rounded up
        whole = {"collective": 6 * states, "parity": (6 * states + 1) // 2, "product": 2**5 * states}
        assert int(row["dimension"]) == whole[row["treatment"]]
        assert int(row["dense_bytes"]) == 8 * int(row["dimension"]) ** 2
        assert int(row["density_matrix_bytes"]) == 16 * int(row["dimension"]) ** 2
    assert int(rows[0]["cutoff"]) == result["summary"]["covering"]
    assert int(rows[3]["cutoff"]) == 9


def test_sizes_of_many_spins_stay_exact() -> None:
    asked = question("spins=5000&points=2&from=0&to=0.001&asked=tail")
    row = {
        "answer": {
            "needed": {"tail": 3},
            "status": {"tail": "proven"},
            "error": {"tail": 1e-5},
            "covering": 3,
            "deciding": "tail",
            "stated": None,
        },
        "start": None,
        "note": None,
    }
    result = kinds.result_of(asked, kinds.plan_of(asked), [row, row], name="0" * 64, provenance={})
    product = result["summary"]["sizes"][2]
    assert product["dimension"] == 4 * 2**5000
    assert json.loads(json.dumps(result))["summary"]["sizes"][2] == product
    assert sizes_csv_of(result).splitlines()[3].split(",")[5] == str(4 * 2**5000)
    assert picture(asked, result)["sizes"][2]["dimension"] == "5.6 × 10¹⁵⁰⁵"


@pytest.mark.parametrize(
    ("number", "words"),
    [
        (0, "0 bytes"),
        (1023, "1023 bytes"),
        (2048, "2 KiB"),
        (3 * 2**30, "3 GiB"),
        (2**90, "1.2 × 10²⁷ bytes"),
    ],
)
def test_memory_in_words(number: int, words: str) -> None:
    assert bytes_words(number) == words


def test_numbers_in_words() -> None:
    assert whole_words(1234567) == "1 234 567"
    assert whole_words(31 * 10**11) == "3.1 × 10¹²"
    assert levels_words(36, "phonon") == "37 phonon levels (n = 0..36)"
    assert levels_words(0, "phonon") == "1 phonon level (n = 0 alone)"


# -- computing --------------------------------------------------------------------------------------


def test_many_askers_one_computation(server: RunningServer) -> None:
    query = "spins=7&points=31&to=0.71&stated=8"
    before = server.counts()
    with ThreadPoolExecutor(8) as threads:
        answers = list(
            threads.map(lambda n: server.client.get(f"/api/cutoff?{query}&title=asker{n}"), range(8))
        )
    assert {answer.status_code for answer in answers} == {200}
    assert len({json.dumps(answer.json()["covering"]) for answer in answers}) == 1
    after = server.counts()
    assert after["jobs_started"] - before["jobs_started"] == 1
    assert after["points_computed"] - before["points_computed"] == 31


def test_a_restart_finds_what_was_computed(start_server: ServerFactory) -> None:
    first = start_server("--workers", "1")
    before = first.client.get("/api/cutoff?spins=3&points=9&stated=4").json()
    first.stop()
    second = start_server("--workers", "1")
    after = second.client.get("/api/cutoff?spins=3&points=9&stated=4&title=again").json()
    assert second.counts()["chunks_computed"] == 0
    assert second.counts()["chunks_found"] > 0
    assert after["summary"] == before["summary"]
    assert after["provenance"] == before["provenance"]


def test_opening_the_page_computes_nothing(server: RunningServer) -> None:
    before = server.counts()
    for address in ("/cutoff?spins=9&points=17&to=0.9", "/api/cutoff/face?spins=9&points=17&to=0.9"):
        assert server.client.get(address).status_code == 200
    after = server.counts()
    assert (after["jobs_started"], after["chunks_computed"]) == (
        before["jobs_started"],
        before["chunks_computed"],
    )


def test_a_long_question_is_told_so_and_can_be_followed(server: RunningServer) -> None:
    query = "spins=30&points=201&to=0.77"
    answer = server.client.get(f"/api/cutoff?{query}&wait=0")
    assert answer.status_code == 202
    facts = answer.json()
    assert facts["total"] == 201
    job = facts["job"].rsplit("/", 1)[1]
    assert server.client.delete(f"/api/jobs/{job}?for=everyone").json()["state"] == "cancelled"
    part = server.client.get(f"/api/jobs/{job}/result?partial=1")
    if part.status_code == 200:
        assert not part.json()["complete"]
    clash = server.client.get(f"/api/jobs/{job}/picture?spins=31")
    assert clash.json()["error"]["code"] == "another-question"


def test_the_form_gives_the_link(server: RunningServer) -> None:
    typed = {
        "spins": "6",
        "stated": " 12 ",
        "need-gap": "0,01",
        "asked": "tail,gap",
        "low": "",
        "frame": "trap",
    }
    answer = server.client.post("/api/cutoff/link", json=typed).json()
    assert answer["link"] == "/cutoff?spins=6&frame=trap&asked=gap,tail&need-gap=0.01&stated=12"
    face = server.client.get(f"/api/cutoff/face?{answer['query']}").json()
    assert face["texts"]["stated"] == "12"
    assert face["texts"]["need-gap"] == "0.01"
    assert face["judged"] == ["gap", "tail"]
    assert face["sweep"] == "spins=6&frame=trap"


def test_a_long_note_gets_a_short_link(server: RunningServer) -> None:
    answer = server.client.post(
        "/api/cutoff/link", json={"note": "ä" * 900, "stated": "4", "spins": "2"}
    ).json()
    assert answer["link"].startswith("/cutoff?stored=")
    page = server.client.get(answer["link"])
    assert page.status_code == 200
    assert "ä" * 900 in page.text


# -- what it says -----------------------------------------------------------------------------------


def truncated(spins: int, coupling: float, cutoff: int) -> tuple[np.ndarray, float, float]:
    """Return the lowest six levels, boson number and order parameter of the resonant Dicke model, dense.

    Written out from the Hamiltonian alone, so that nothing of the solver is used.
    """
    j = 0.5 * spins
    m = np.arange(-j, j + 1.0)
    raising = np.diag(np.sqrt(j * (j + 1.0) - m[:-1] * (m[:-1] + 1.0)), -1)
    jx, jz = 0.5 * (raising + raising.T), np.diag(m)
    n = np.arange(cutoff + 1.0)
    position = np.diag(np.sqrt(n[1:]), 1)
    position = position + position.T
    ones = np.eye(cutoff + 1)
    matrix = np.kron(np.diag(n), np.eye(spins + 1)) + np.kron(ones, jz)
    matrix += 2.0 * coupling / np.sqrt(spins) * np.kron(position, jx)
    energies, states = np.linalg.eigh(matrix)
    ground = states[:, 0].reshape(cutoff + 1, spins + 1)
    bosons = float(n @ (ground**2).sum(axis=1))
    order = float(np.sqrt(np.einsum("na,ab,nb->", ground, jx @ jx, ground)) / j)
    return energies[:6], bosons, order


def test_needs_against_plain_diagonalisation(server: RunningServer) -> None:
    """Up to critical the ground level is single; each need is the smallest cutoff that will do."""
    result = server.client.get("/api/cutoff?spins=5&points=6&to=0.5&stated=6").json()
    for point, coupling in enumerate(result["x"][1:], start=1):
        levels, bosons, order = truncated(5, coupling, 60)
        reached = {}
        for cutoff in range(2, 30):
            found = truncated(5, coupling, cutoff)
            reached[cutoff] = {
                "energies": np.abs(found[0] - levels).max() <= 1e-3,
                "boson_number": abs(found[1] - bosons) <= 1e-2,
                "order_parameter": abs(found[2] - order) <= 1e-3,
            }
        for quantity in ("energies", "boson_number", "order_parameter"):
            needed = result["needed"][quantity][point]
            assert all(good[quantity] for cutoff, good in reached.items() if cutoff >= needed), quantity
            if needed > 2:
                assert not reached[needed - 1][quantity], (quantity, coupling)
            if quantity == "energies":
                assert result["stated"]["good"][quantity][point] == reached[6][quantity]
        assert result["values"]["energy"][point] == pytest.approx(levels[0], abs=1e-8)
        assert result["values"]["boson_number"][point] == pytest.approx(bosons, abs=1e-6)


def test_the_summary_follows_from_the_points(server: RunningServer) -> None:
    result = server.client.get("/api/cutoff?spins=5&points=9&stated=9").json()
    summary, stated = result["summary"], result["stated"]
    assert summary["covering"] == max(result["covering"])
    deciding = summary["deciding"]
    assert result["covering"][deciding["point"]] == summary["covering"]
    assert result["needed"][deciding["quantity"]][deciding["point"]] == summary["covering"]
    assert result["x"][deciding["point"]] == deciding["x"]
    good = [x for x, enough in zip(result["x"], stated["enough"], strict=True) if enough]
    assert summary["stated"]["good_points"] == len(good)
    inside = [
        x for x in result["x"] if any(one["from"] <= x <= one["to"] for one in summary["stated"]["good"])
    ]
    assert inside == good
    for quantity, worst in summary["stated"]["worst"].items():
        assert worst["error"] == max(stated["error"][quantity])


def test_a_cutoff_that_does_not_hold_the_levels(server: RunningServer) -> None:
    """One spin and n = 0 make two states; six levels cannot be had from them."""
    result = server.client.get("/api/cutoff?spins=1&points=3&stated=0").json()
    assert result["stated"]["error"]["energies"] == [None] * 3
    assert result["stated"]["good"]["energies"] == [False] * 3
    assert result["summary"]["stated"]["worst"]["energies"]["error"] is None
    assert result["summary"]["stated"]["good_points"] == 0
    words = picture(question("spins=1&points=3&stated=0"), result)["words"]["stated"]
    assert words["verdict"] == "Your 1 boson level (n = 0 alone) is enough nowhere on the whole sweep."


def test_maps_lie_row_after_row(server: RunningServer) -> None:
    result = server.client.get("/api/cutoff?spins=3&points=5&across=bias&rows=3&high=0.4&stated=5").json()
    assert result["second"] == {"name": "bias", "values": [0.0, 0.2, 0.4]}
    assert result["x"] == result["axis"]["values"] * 3
    alone = server.client.get("/api/cutoff?spins=3&points=5&bias=0.4&stated=5").json()
    assert result["covering"][10:] == alone["covering"]
    assert result["needed"]["gap"][10:] == alone["needed"]["gap"]


def test_a_start_is_one_more_quantity(server: RunningServer) -> None:
    plain = server.client.get("/api/cutoff?spins=2&points=3&stated=5").json()
    query = "spins=2&points=3&start=coherent&start-quanta=2&start-periods=1&stated=5"
    result = server.client.get(f"/api/cutoff?{query}").json()
    assert result["needed"]["energies"] == plain["needed"]["energies"]
    for point, needed in enumerate(result["needed"]["start"]):
        assert needed >= result["values"]["at_start"][point]
        assert result["covering"][point] == max(needed, plain["covering"][point])
    # Poisson weight above M = 8 of two quanta is 2.4e-4, above 9 it is 4.6e-5 (tables of the Poisson law)
    assert result["values"]["at_start"][0] == 9


# -- margins ----------------------------------------------------------------------------------------


def test_margin_cutoffs() -> None:
    assert margin_cutoffs(40) == (40, 42, 50, 60)
    assert margin_cutoffs(37) == (37, 39, 47, 56)
    assert margin_cutoffs(0) == (0, 2)


@pytest.mark.parametrize(
    "query",
    [
        "spins=4&points=5",
        "spins=3&points=3&ensemble=collective&quanta=0.5",
        "spins=2&points=3&start=fock&start-quanta=2",
    ],
)
def test_margins_shrink_from_the_covering_cutoff_on(server: RunningServer, query: str) -> None:
    result = server.client.get(f"/api/cutoff?{query}").json()
    summary = result["summary"]
    address = f"/api/cutoff/margins?{query}&point={summary['deciding']['point']}&cutoff={summary['covering']}"
    answer = server.client.get(address)
    assert answer.status_code == 200, answer.text
    found = answer.json()
    assert found["cutoffs"] == list(margin_cutoffs(summary["covering"]))
    assert set(found["error"]) == set(result["needed"])
    for quantity, errors in found["error"].items():
        assert errors[0] <= found["allowed"][quantity]
        assert errors[-1] <= max(errors[0], 1e-7)
    before = server.counts()["portraits_started"]
    assert server.client.get(address).json() == found
    assert server.counts()["portraits_started"] == before


@pytest.mark.parametrize(
    ("query", "field"),
    [
        ("spins=2&points=3&point=3&cutoff=4", "point"),
        ("spins=2&points=3&point=-1&cutoff=4", "point"),
        ("spins=2&points=3&point=0", "cutoff"),
        ("spins=2&points=3&point=0&cutoff=x", "cutoff"),
        ("spin=2&cutoff=3", "spin"),
    ],
)
def test_margins_that_cannot_be_asked(server: RunningServer, query: str, field: str) -> None:
    answer = server.client.get(f"/api/cutoff/margins?{query}")
    assert answer.status_code == 422
    assert answer.json()["error"]["field"] == field


def test_a_point_that_is_not_settled_has_a_note() -> None:
    asked = question("spins=2&points=3&stated=3")
    made = cutoff_plan.make(asked)
    row = {"answer": None, "start": None, "note": "not settled: too large"}
    result = kinds.result_of(asked, made, [row, None, row], name="0" * 64, provenance={})
    assert not result["complete"]
    assert result["summary"]["covering"] is None
    assert result["notes"] == [
        {"point": 0, "note": "not settled: too large"},
        {"point": 2, "note": "not settled: too large"},
    ]
    assert picture(asked, result)["words"]["headline"] == "No point is settled yet."

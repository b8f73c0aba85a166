"""Maps: links, refusals, which cells are computed, one result with four faces, resuming."""

import csv
import html
import io
import itertools
import json
import math
import signal
from pathlib import Path
from typing import Any

import numpy as np
import pytest
from hypothesis import assume, given
from hypothesis import strategies as st

from app import identity, kinds, links, map_refine
from app.errors import SheetError
from app.figure_map import SEQUENTIAL, figure
from app.keys import SWEPT
from app.map_exports import csv_of
from app.map_grid import Grid
from app.map_sheets import MAP_OWN_KEYS, SHOWN, MapSheet
from app.map_ways import column_of, place_in, row_of
from app.plan import axis_values, model_at
from app.sheets import SAME_QUANTITY
from tests.app.test_exports import comparable, compute
from tests.app.test_links import sheets
from tests.running import ROOT, RunningServer, ServerFactory

STYLESHEET = (ROOT / "static" / "softmode.css").read_text(encoding="utf-8")
SMALL = "spins=6&levels=2&points=25&rows=17&across=splitting&low=0.4&high=1.6&to=1"
QUERIES = [
    SMALL,
    f"{SMALL}&every=all",
    "spins=4&points=9&rows=5&across=ratio&show=order-parameter&title=Five",
    "along=spins&spins=6&rows=4&high=0.8",
    "across=spins&low=2&high=7&rows=3&points=5&bias=0.2",
    "along=coupling-over-critical&across=mode&spins=3&points=6&rows=4&levels=3",
]
OLD = json.loads(Path(__file__).with_name("old_map_links.json").read_text())


def asked(query: str) -> MapSheet:
    return links.map_from_pairs(links.split_query(query))


def answer_of(server: RunningServer, query: str) -> dict[str, Any]:
    """Return the result of a map, however busy the machine is."""
    answer = server.client.get(f"/api/map?{query}&wait=280", timeout=300)
    assert answer.status_code == 200, answer.text[:500]
    found: dict[str, Any] = answer.json()
    return found


def own_value(name: str) -> st.SearchStrategy[Any]:
    key = MAP_OWN_KEYS[name]
    if key.kind == "integer":
        return st.integers(2, 60)
    if key.kind == "real":
        return st.floats(-3.0, 3.0) | st.sampled_from([0.5, 1.0, 2.0, 4.0])
    ends = st.floats(-1e3, 1e3)
    if key.kind == "interval":
        return st.tuples(ends, ends).filter(lambda pair: pair[0] < pair[1]).map(list)
    if key.kind == "numbers":
        return st.lists(ends, min_size=1, max_size=8, unique=True)
    return st.sampled_from(key.choices)


@st.composite
def maps(draw: st.DrawFn) -> MapSheet:
    """Draw any map that may be asked."""
    sheet = draw(sheets())
    kept = {name: value for name, value in sheet.explicit().items() if name not in {"each", "points"}}
    names = draw(st.lists(st.sampled_from(sorted(MAP_OWN_KEYS)), unique=True, max_size=5))
    points = draw(st.none() | st.integers(2, 80))
    try:
        return MapSheet.of(kept | {"points": points} | {name: draw(own_value(name)) for name in names})
    except SheetError:
        assume(False)
        raise


@given(maps())
def test_map_to_link_to_map(question: MapSheet) -> None:
    query = links.map_query(question)
    again = asked(query)
    assert again == question
    assert links.map_query(again) == query
    assert links.parse_link(f"http://127.0.0.1:8150{links.map_link(question)}") == question
    assert query.isascii()
    assert MapSheet.of(json.loads(json.dumps(question.data(), allow_nan=False))) == question


@pytest.mark.parametrize(
    ("typed", "canonical"),
    [
        ("", ""),
        ("across=detuning&low=-1&high=1&rows=61&points=61&levels=2", ""),
        ("along=splitting&across=coupling", "along=splitting"),
        ("levels=6&points=101", "points=101&levels=6"),
        ("rows=5&across=bias&show=entropy", "across=bias&rows=5&show=entropy"),
        ("contours=2,0.5,1&shades=0:3&scale=linear", "shades=0:3&contours=0.5,1,2"),
        ("show=gap&every=adaptive", ""),
        ("across=spins&spins=9", "spins=9&across=spins"),
        ("along=spins&spins=30&points=30", "spins=30&along=spins"),
    ],
)
def test_one_spelling(typed: str, canonical: str) -> None:
    assert links.map_query(asked(typed)) == canonical


@pytest.mark.parametrize("old", OLD, ids=lambda old: old["link"][:50])
def test_old_links_open_unchanged(old: dict[str, Any]) -> None:
    question = links.parse_link(old["link"])
    assert isinstance(question, MapSheet)
    assert {name: question.data()[name] for name in old["sheet"]} == old["sheet"]
    assert links.map_link(question) == old["canonical"]
    assert links.parse_link(old["canonical"]) == question


def test_what_is_only_shown_is_not_computed_again() -> None:
    first = asked("spins=5")
    shown = "show=entropy scale=symmetric shades=-1:1 contours=1 title=x unit=kHz frame=trap at=0.1"
    for other in shown.split():
        more = "&scale=symmetric" if other.startswith("shades") else ""
        assert asked(f"spins=5&{other}{more}") != first
        assert identity.sheet_id(asked(f"spins=5&{other}{more}")) == identity.sheet_id(first)
    # both swept quantities are overridden where they are fixed, too
    for other in ("coupling=0.9", "splitting=2&to=0.75"):
        assert identity.sheet_id(asked(f"spins=5&{other}")) == identity.sheet_id(first)
    for other in ("rows=9", "every=all", "levels=3", "low=0", "across=bias", "tol=1e-6", "points=9"):
        assert identity.sheet_id(asked(f"spins=5&{other}")) != identity.sheet_id(first)


# (query, field that the error names, its code)
MALFORMED = [
    ("acros=bias", "acros", "unknown-key"),
    ("each=spins:1,2", "each", "map-or-family"),
    ("across=bias&across=bias", "across", "repeated-key"),
    ("across=", "across", "unknown-choice"),
    ("across=time", "across", "unknown-choice"),
    ("across=coupling", "across", "same-quantity"),
    ("across=coupling-over-critical", "across", "same-quantity"),
    ("along=splitting&across=detuning", "across", "same-quantity"),
    ("low=2&high=1", "high", "empty-range"),
    ("across=spins&low=0", "low", "out-of-range"),
    ("across=spins&low=1.5", "low", "not-a-whole-number"),
    ("across=ratio&low=-1", "low", "out-of-range"),
    ("across=mode&low=0", "low", "out-of-range"),
    ("low=1,5", "low", "not-a-number"),
    ("rows=1", "rows", "out-of-range"),
    ("rows=2.5", "rows", "not-a-whole-number"),
    ("rows=700", "rows", "too-many-points"),
    ("points=2001&rows=20", "rows", "too-many-points"),
    ("across=spins&spins=5&rows=6", "rows", "too-many-points"),
    ("show=gaps", "show", "unknown-choice"),
    ("show=boson_number", "show", "unknown-choice"),
    ("scale=sqrt", "scale", "unknown-choice"),
    ("scale=log&shades=0:1", "shades", "not-positive"),
    ("scale=log&contours=-1,1", "contours", "not-positive"),
    ("scale=symmetric&shades=0:1", "shades", "not-symmetric"),
    ("shades=1:0", "shades", "bad-interval"),
    ("shades=1", "shades", "bad-interval"),
    ("shades=a:b", "shades", "not-a-number"),
    ("contours=", "contours", "not-a-number"),
    ("contours=1,1", "contours", "repeated-value"),
    ("contours=1,2,3,4,5,6,7,8,9", "contours", "wrong-type"),
    ("contours=nan", "contours", "not-a-number"),
    ("every=some", "every", "unknown-choice"),
    ("stated=3", "stated", "unknown-key"),
    ("v=2", "v", "unknown-version"),
    ("levels=0", "levels", "out-of-range"),
    ("from=9", "from", "empty-range"),
]


@pytest.mark.parametrize(("query", "field", "code"), MALFORMED)
def test_malformed_links(server: RunningServer, query: str, field: str, code: str) -> None:
    before = server.counts()["jobs_started"]
    answer = server.client.get(f"/api/map?{query}")
    assert answer.status_code == 422
    error = answer.json()["error"]
    assert (error["field"], error["code"]) == (field, code)
    assert error["message"]
    assert error["allowed"]
    page = server.client.get(f"/map?{query}", headers={"Accept": "text/html"})
    assert page.status_code == 422
    assert error["message"] in html.unescape(page.text)
    assert server.client.post("/api/jobs", json={"link": f"/map?{query}"}).json()["error"]["code"] == code
    assert server.counts()["jobs_started"] == before


def test_opening_a_map_computes_nothing(server: RunningServer) -> None:
    before = server.counts()["jobs_started"]
    for address in (
        "/map",
        f"/map?{SMALL}",
        f"/api/map/face?{SMALL}",
        f"/api/map/cell?{SMALL}&row=1&column=2",
    ):
        assert server.client.get(address, headers={"accept": "text/html"}).status_code == 200
    way = server.client.get("/sweep/map?spins=7&each=ratio:0,1&points=500&at=0.2&title=T")
    assert way.status_code == 303
    assert way.headers["location"] == "../map?spins=7&title=T"
    assert (
        server.client.post("/api/map/link", json={"spins": "7", "rows": " 9 "}).json()["query"]
        == "spins=7&rows=9"
    )
    assert server.counts()["jobs_started"] == before


def test_too_expensive_is_refused_before_anything_runs(server: RunningServer) -> None:
    server.wait_until(lambda: server.counts()["workers_busy"] == 0)
    before = server.counts()["chunks_computed"]
    answer = server.client.get("/api/map?spins=5000&to=3&points=200&rows=200&every=all")
    assert answer.status_code == 422
    assert answer.json()["error"]["code"] in {"too-expensive", "too-much-memory"}
    assert server.counts()["chunks_computed"] == before


# -- which cells are computed ------------------------------------------------------------------------


def surface(shape: tuple[int, int], edge: float) -> np.ndarray:
    """Return a slope that bends at a line: steeply for a large `edge`."""
    down, along = np.meshgrid(np.linspace(0, 1, shape[0]), np.linspace(0, 1, shape[1]), indexing="ij")
    return 1.0 / (1.0 + np.exp(-edge * (along - 0.4 - 0.3 * down)))


def refined(judged: tuple[np.ndarray, ...], order: int) -> tuple[np.ndarray, map_refine.Survey]:
    """Follow a survey to its end; cells of a generation come in one order or the other, some at a time."""
    computed = np.zeros(judged[0].shape, dtype=bool)
    while True:
        seen = tuple(np.where(computed, values, np.nan) for values in judged)
        found = map_refine.survey(seen, computed)
        if not found.wanted.any():
            return computed, found
        wanted = [tuple(place) for place in np.argwhere(found.wanted)][::order]
        for place in wanted:
            computed[place] = True


@pytest.mark.parametrize("shape", [(61, 61), (33, 50), (9, 200), (2, 40), (3, 3), (2, 2)])
@pytest.mark.parametrize("edge", [3.0, 30.0])
def test_the_cells_left_out_are_those_that_do_not_bend(shape: tuple[int, int], edge: float) -> None:
    values = surface(shape, edge)
    judged = (values, np.zeros(shape), np.ones(shape), np.ones(shape))
    computed, found = refined(judged, 1)
    again, _ = refined(judged, -1)
    assert (computed == again).all()
    picture = map_refine.filled(np.where(computed, values, np.nan), computed, found)
    assert np.isfinite(picture).all()
    assert (picture[computed] == values[computed]).all()
    # a prediction, not a bound: it may fall a little short of what it allows
    assert np.abs(picture - values).max() < 0.012 * np.ptp(values)
    if min(shape) > 30:
        assert computed.mean() < 0.5


def test_a_plane_needs_its_coarse_grid_only() -> None:
    plane = np.add.outer(np.arange(41.0), 2.0 * np.arange(30.0))
    computed, found = refined((plane,) * 4, 1)
    assert computed.sum() == 6 * 5
    assert map_refine.filled(np.where(computed, plane, np.nan), computed, found) == pytest.approx(plane)


def test_cells_without_numbers_are_surrounded() -> None:
    values = surface((33, 33), 3.0)
    values[16, 16] = np.nan
    computed, _ = refined((values,) * 4, 1)
    assert computed[15:18, 15:18].all()


def test_adaptive_and_all_agree(server: RunningServer) -> None:
    found, full = (answer_of(server, query) for query in QUERIES[:2])
    cells = found["counts"]["cells"]
    assert full["counts"]["computed"] == cells == 25 * 17
    assert found["counts"]["computed"] < cells
    known = np.array(found["computed"], dtype=bool)
    for key, allowed in {"boson_number": 0.01, "order_parameter": 0.01, "gap": 0.03, "gap_any": 0.03}.items():
        here, there = (np.array(result["series"][key]) for result in (found, full))
        assert np.abs(here - there).max() < allowed * np.ptp(there), key
        errors = np.array(full["series"][f"{key}_error"]) + np.array(
            [[0.0 if error is None else error for error in row] for row in found["series"][f"{key}_error"]]
        )
        assert (np.abs(here - there) <= errors)[known].all()
        # what is interpolated carries no bound
        assert all(
            (error is None) == (not flag)
            for error, flag in zip(
                itertools.chain(*found["series"][f"{key}_error"]), known.ravel(), strict=True
            )
        )


@pytest.mark.soak
@pytest.mark.slow
def test_superradiant_phase_diagram_with_a_third_of_the_cells(server: RunningServer) -> None:
    found, full = (answer_of(server, query) for query in ("spins=20", "spins=20&every=all"))
    assert found["counts"]["computed"] * 3 <= found["counts"]["cells"] == 61 * 61
    for key in ("boson_number", "order_parameter"):
        here, there = (np.array(result["series"][key]) for result in (found, full))
        assert np.abs(here - there).max() < 0.01 * np.ptp(there)


@pytest.mark.parametrize("query", QUERIES)
def test_cells_agree_with_the_sweeps_of_their_row_and_column(server: RunningServer, query: str) -> None:
    question = asked(query)
    result = answer_of(server, query)
    assert result["complete"]
    rows, columns = np.nonzero(np.array(result["computed"]))
    place = len(rows) // 2
    row, column = int(rows[place]), int(columns[place])
    x, y = result["axis"]["values"][column], result["across"]["values"][row]
    series = result["series"]
    for sheet, number in ((row_of(question, y), column), (column_of(question, x), row)):
        sweep = server.client.get(f"/api/sweep?{links.query_of(sheet)}").json()
        curve = sweep.get("curves", [sweep])[0]
        for key in ("gap_any", "boson_number", "order_parameter"):
            error = curve["series"][f"{key}_error"][number] + series[f"{key}_error"][row][column]
            assert series[key][row][column] == pytest.approx(
                curve["series"][key][number], abs=error + 1e-13, rel=1e-13
            )
    ways = server.client.get(f"/api/map/cell?{query}&row={row}&column={column}").json()
    point = server.client.get(f"/api/{ways['point']}").json()
    error = point["series"]["boson_number_error"][0] + series["boson_number_error"][row][column]
    assert point["series"]["boson_number"][0] == pytest.approx(series["boson_number"][row][column], abs=error)
    assert ways["row_sweep"].startswith("sweep")
    assert server.client.get(f"/{ways['column_sweep']}").status_code == 200


@pytest.mark.parametrize("across", sorted(SWEPT))
@pytest.mark.parametrize("along", sorted(SWEPT))
def test_every_pair_leads_to_the_same_model(along: str, across: str) -> None:
    query = f"along={along}&across={across}&splitting=1.2&spins=7&points=4&rows=3"
    if along == across or any({along, across} <= group for group in SAME_QUANTITY):
        with pytest.raises(SheetError, match="sets already"):
            asked(query)
        return
    question = asked(query)
    made = kinds.plan_of(question)
    for row, column in ((1, 1), (2, 3)):
        x, y = axis_values(question.sheet)[column], question.rows[row]
        model = made.questions[row * 4 + column].model
        for sheet, here in ((row_of(question, y), x), (column_of(question, x), y)):
            again = model_at(sheet, here, sheet.each.values[0] if sheet.each else None)
            assert again.spins == model.spins
            for name in ("mode", "splitting", "rotating", "counter", "bias"):
                assert getattr(again, name) == pytest.approx(getattr(model, name), rel=1e-12, abs=1e-15)
        place = place_in(question, x, y)
        assert links.place_from_pairs(links.split_query(links.place_query(place))) == place


def test_a_row_without_a_critical_coupling_has_no_sweep_of_its_own(server: RunningServer) -> None:
    query = "along=coupling-over-critical&across=detuning&points=5&rows=3"
    ways = server.client.get(f"/api/map/cell?{query}&row=0&column=2").json()
    assert ways["row_sweep"] is None
    assert ways["point"] is None
    assert ways["column_sweep"].startswith("sweep?")
    for wrong, field in (("row=3&column=0", "row"), ("row=0&column=5", "column"), ("row=-1&column=0", "row")):
        error = server.client.get(f"/api/map/cell?{query}&{wrong}").json()["error"]
        assert (error["field"], error["code"]) == (field, "out-of-range")


# -- one result, four faces ----------------------------------------------------------------------------


@pytest.mark.parametrize("query", QUERIES)
def test_table_arrays_and_command_line_agree_with_json(
    server: RunningServer, query: str, tmp_path: Path
) -> None:
    result = answer_of(server, query)
    table = server.client.get(f"/api/map.csv?{query}")
    assert table.headers["content-type"].startswith("text/csv")
    assert table.text == csv_of(result)
    lines = [line for line in table.text.splitlines(keepends=True) if not line.startswith("#")]
    rows = list(csv.DictReader(io.StringIO("".join(lines), newline=""), strict=True))
    with np.load(io.BytesIO(server.client.get(f"/api/map.npz?{query}").content), allow_pickle=False) as found:
        arrays = {name: found[name] for name in found.files}
    columns = len(result["axis"]["values"])
    assert len(rows) == result["counts"]["cells"] == columns * len(result["across"]["values"])
    for number, line in enumerate(rows):
        row, column = divmod(number, columns)
        assert (
            float(line[result["axis"]["name"]]) == result["axis"]["values"][column] == arrays["axis"][column]
        )
        assert int(line["computed"]) == result["computed"][row][column] == arrays["computed"][row, column]
        for key, values in result["series"].items():
            inner = values[row][column]
            several = inner if isinstance(inner, list) else [inner]
            names = [f"{key}_{level}" for level in range(len(several))] if inner is not several[0] else [key]
            for name, value, stored in zip(
                names, several, np.atleast_1d(arrays[key][row, column]), strict=True
            ):
                assert (None if line[name] == "" else float(line[name])) == value
                assert math.isnan(stored) if value is None else stored == value
    assert str(arrays["link"]) == result["link"]
    assert json.loads(str(arrays["provenance"])) == result["provenance"]
    assert all(values.dtype == np.float64 for name, values in arrays.items() if name in result["series"])
    ended = compute(f"http://elsewhere:8150/map?{query}", tmp_path / "x.json", "--workers", "1")
    assert ended.returncode == 0, ended.stderr
    offline = json.loads((tmp_path / "x.json").read_text())
    assert json.dumps(comparable(offline)) == json.dumps(comparable(result))


def test_arrays_from_the_command_line(server: RunningServer, tmp_path: Path) -> None:
    assert compute(f"/map?{QUERIES[2]}", tmp_path / "x.npz").returncode == 0
    served = io.BytesIO(server.client.get(f"/api/map.npz?{QUERIES[2]}").content)
    with (
        np.load(tmp_path / "x.npz", allow_pickle=False) as here,
        np.load(served, allow_pickle=False) as there,
    ):
        assert here.files == there.files
        for name in set(here.files) - {"provenance"}:
            assert here[name].tobytes() == there[name].tobytes()
    assert compute("/sweep?spins=2&points=3", tmp_path / "y.npz").returncode == 2


@pytest.mark.soak
def test_a_restart_in_the_middle_changes_nothing(start_server: ServerFactory, server: RunningServer) -> None:
    query = "spins=20&points=25&rows=25"
    whole = answer_of(server, query)
    first = start_server("--workers", "2")
    job = first.client.post("/api/jobs", json={"link": f"/map?{query}"}).json()["id"]
    # past the coarse grid: a grown part of the plan is found again in the store
    first.wait_until(lambda: first.counts()["points_computed"] > 20)
    first.stop(signal.SIGKILL)
    second = start_server("--workers", "2")
    again = answer_of(second, query)
    counts = second.counts()
    assert counts["chunks_found"] > 0
    assert counts["points_computed"] < whole["counts"]["computed"]
    assert again["id"] == job
    assert json.dumps(again["series"]) == json.dumps(whole["series"])
    assert again["computed"] == whole["computed"]
    third = answer_of(second, query)
    assert third == again


def test_cancelled_and_taken_up_again(server: RunningServer) -> None:
    link = "/map?spins=12&points=25&rows=25"
    facts = server.client.post("/api/jobs", json={"link": link}).json()
    for _ in range(4):
        server.client.delete(f"/api/jobs/{facts['id']}?for=everyone")
        facts = server.client.post("/api/jobs", json={"link": link}).json()
    result = answer_of(server, link.partition("?")[2])
    assert result["complete"]
    ended = server.client.get(f"/api/jobs/{facts['id']}").json()
    assert (ended["state"], ended["done"]) == ("done", 25 * 25)


# -- the picture ---------------------------------------------------------------------------------------


def test_pictures_of_every_quantity(server: RunningServer) -> None:
    job = server.client.post("/api/jobs", json={"link": f"/map?{SMALL}"}).json()["id"]
    result = answer_of(server, SMALL)
    for name, key in SHOWN.items():
        shown = server.client.get(f"/api/jobs/{job}/picture?{SMALL}&show={name}").json()
        read = shown["readout"]
        assert shown["complete"]
        if key in result["series"] and key != "energy":
            assert read["values"] == result["series"][key]
        if f"{key}_error" in result["series"]:
            assert read["bounds"] == result["series"][f"{key}_error"]
        assert [[state == 2 for state in row] for row in read["state"]] == [
            [flag == 1 for flag in row] for row in result["computed"]
        ]
    widths = [
        [
            max(u - v for u, v in zip(*pair, strict=True)) if pair[1][0] is not None else None
            for pair in zip(*rows, strict=True)
        ]
        for rows in zip(result["series"]["energy"], result["series"]["energy_lower"], strict=True)
    ]
    assert read["shown"]["name"] == "error"
    assert read["values"] == widths


def test_the_critical_line_lies_where_the_coupling_is_critical() -> None:
    question = asked("points=31&rows=31&low=-0.9")
    made = kinds.plan_of(question)
    grid = Grid(question, made, [None] * question.total)
    traces = {trace["name"]: trace for trace in figure(question, grid, np.full((31, 31), np.nan))["data"]}
    line = traces["critical"]
    # lambda_c = sqrt(omega omega_0)/2 (Emary, Brandes, Phys. Rev. E 67, 066203 (2003))
    for y, row in zip(line["y"], line["z"], strict=True):
        crossing = 0.5 * math.sqrt(1.0 + y)
        signs = [value > 0.0 for value in row]
        assert signs == [x > crossing for x in line["x"]]
    biased = asked("points=31&rows=31&bias=0.1")
    traces = figure(biased, Grid(biased, kinds.plan_of(biased), [None] * 961), np.full((31, 31), np.nan))[
        "data"
    ]
    assert "critical" not in {trace["name"] for trace in traces}


def lightness_and_hue(colour: str) -> np.ndarray:
    """Return a colour in a space where equal distances look equal.

    B. Ottosson, "A perceptual color space for image processing" (2020), matrices from memory.
    """
    raw = np.array([int(colour[start : start + 2], 16) for start in (1, 3, 5)]) / 255.0
    linear = np.where(raw <= 0.04045, raw / 12.92, ((raw + 0.055) / 1.055) ** 2.4)
    cones = np.cbrt(
        np.array(
            [
                [0.4122214708, 0.5363325363, 0.0514459929],
                [0.2119034982, 0.6806995451, 0.1073969566],
                [0.0883024619, 0.2817188376, 0.6299787005],
            ]
        )
        @ linear
    )
    found: np.ndarray = (
        np.array(
            [
                [0.2104542553, 0.7936177850, -0.0040720468],
                [1.9779984951, -2.4285922050, 0.4505937099],
                [0.0259040371, 0.7827717662, -0.8086757660],
            ]
        )
        @ cones
    )
    return found


@pytest.mark.parametrize("scheme", [0, 1])
def test_the_shades_are_even_steps(scheme: int) -> None:
    colours = []
    for _, token in SEQUENTIAL:
        pair = STYLESHEET.split(f"--{token}: light-dark(")[1].split(")")[0].split(", ")
        colours.append(lightness_and_hue(pair[scheme]))
    steps = [float(np.linalg.norm(after - before)) for before, after in itertools.pairwise(colours)]
    assert max(steps) < 1.05 * min(steps)
    lightness = [colour[0] for colour in colours]
    assert lightness == sorted(lightness, reverse=scheme == 0)


def test_tokens_of_a_map_are_in_the_stylesheet() -> None:
    for query in ("", "scale=symmetric&contours=0.1", "scale=log"):
        question = asked(query)
        grid = Grid(question, kinds.plan_of(question), [None] * question.total)
        text = json.dumps(figure(question, grid, np.full((61, 61), np.nan)))
        for piece in text.split('"token:')[1:]:
            token = piece.partition('"')[0].partition("/")[0]
            assert f"--{token}:" in STYLESHEET

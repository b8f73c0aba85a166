"""Single points: the numbers of the sweep, their pictures, their links, and what is refused."""

import math
import re
from concurrent.futures import ThreadPoolExecutor
from typing import Any

import pytest

from app import links
from app.errors import SheetError
from app.figure_point import point_figures
from app.places import place_of
from app.points import chain_of
from app.series import SERIES_KEYS
from tests.running import ROOT, RunningServer, ServerFactory

STYLESHEET = (ROOT / "static" / "softmode.css").read_text(encoding="utf-8")


def place(query: str) -> Any:
    return links.place_from_pairs(links.split_query(query))


def point(server: RunningServer, query: str) -> dict[str, Any]:
    answer = server.client.get(f"/api/point?{query}")
    assert answer.status_code == 200, answer.text
    found: dict[str, Any] = answer.json()
    return found


@pytest.mark.parametrize(
    ("query", "number", "curve"),
    [
        ("spins=6&points=31", 0, None),
        ("spins=6&points=31", 13, None),
        ("spins=6&points=31", 30, None),
        ("spins=5&points=11&ratio=0&to=2", 9, None),
        ("along=spins&from=1&to=9&coupling=0.7", 4, None),
        ("points=9&each=spins:4,8", 6, 1),
        ("spins=4&points=9&bias=0.1&detuning=0.2", 5, None),
    ],
)
def test_a_point_has_the_numbers_of_its_sweep(
    server: RunningServer, query: str, number: int, curve: int | None
) -> None:
    sweep = server.client.get(f"/api/sweep?{query}").json()
    series = sweep["series"] if curve is None else sweep["curves"][curve]["series"]
    x = sweep["axis"]["values"][number]
    member = "" if curve is None else f"&member={sweep['curves'][curve]['value']}"
    found = point(server, f"{query}&at={x!r}{member}")
    assert found["axis"]["values"] == [x]
    assert {key: found["series"][key] for key in SERIES_KEYS} == {
        key: [series[key][number]] for key in SERIES_KEYS
    }
    assert found["portrait"]["mean"] == pytest.approx(series["boson_number"][number], abs=1e-6)
    assert sum(found["portrait"]["distribution"]) == pytest.approx(1.0, abs=1e-9)
    assert found["portrait"]["above_needed"] <= sweep["sheet"]["tail"]


def test_neighbours_lead_along_the_sweep(server: RunningServer) -> None:
    found = point(server, "spins=3&points=5&to=1&at=0.25")
    assert found["neighbours"] == {
        "below": "/point?spins=3&to=1&points=5&at=0",
        "above": "/point?spins=3&to=1&points=5&at=0.5",
    }
    between = point(server, "spins=3&points=5&to=1&at=0.3")
    assert between["neighbours"]["below"].endswith("at=0.25")
    assert between["neighbours"]["above"].endswith("at=0.5")
    assert point(server, "spins=3&points=5&to=1&at=1")["neighbours"]["above"] is None


@pytest.mark.parametrize(
    "query",
    ["at=0.3", "spins=4&at=0.75&state=plus", "each=spins:4,8&at=0.1&member=8", "along=spins&at=3&note=a%26b"],
)
def test_links_of_points_are_canonical(query: str) -> None:
    found = place(query)
    assert place(links.place_query(found)) == found
    assert links.place_query(place(links.place_query(found))) == links.place_query(found)
    assert place_of(found.sheet, found.options()) == found
    for x in found.neighbours:
        if x is not None:
            assert found.moved(x).number is not None


def test_a_chain_ends_with_its_point() -> None:
    on_grid, between = place("points=41&to=1&at=0.5"), place("points=41&to=1&at=0.51")
    assert chain_of(on_grid)[-1].model.rotating == 0.5
    assert len(chain_of(on_grid)) > 1
    assert [question.model.rotating for question in chain_of(between)] == [0.51]


@pytest.mark.parametrize(
    ("query", "code", "field"),
    [
        ("", "no-place", "at"),
        ("at=-1", "out-of-range", "at"),
        ("along=spins&at=2.5", "not-a-whole-number", "at"),
        ("at=1&member=4", "no-family", "member"),
        ("at=1&each=spins:4,8&member=5", "not-a-member", "member"),
        ("at=1&state=both", "unknown-choice", "state"),
        ("at=1&at=2", "repeated-key", "at"),
        ("at=1&spin=2", "unknown-key", "spin"),
    ],
)
def test_what_is_no_point_is_refused(server: RunningServer, query: str, code: str, field: str) -> None:
    with pytest.raises(SheetError) as caught:
        place(query)
    assert (caught.value.code, caught.value.field) == (code, field)
    answer = server.client.get(f"/api/point?{query}")
    assert answer.status_code == 422
    assert answer.json()["error"]["code"] == code
    page = server.client.get(f"/point?{query}", headers={"accept": "text/html"})
    assert page.status_code == 422
    assert "This point cannot be shown" in page.text


def test_a_broken_state_needs_a_closed_doublet(server: RunningServer) -> None:
    answer = server.client.get("/api/point?spins=4&at=0.2&state=plus")
    assert answer.status_code == 422
    assert answer.json()["error"]["code"] == "not-solvable"
    assert answer.json()["error"]["field"] == "state"
    closed = point(server, "spins=40&to=1&at=1&state=minus")
    wigner = closed["portrait"]["wigner"]
    assert closed["portrait"]["doublet_closed"]
    assert max(wigner["x"]) < 0.0


def test_a_point_too_dear_is_refused(start_server: ServerFactory) -> None:
    server = start_server("--workers", "1", "--ceiling", "0.001")
    answer = server.client.get("/api/point?spins=300&at=0.7")
    assert answer.status_code == 422
    assert answer.json()["error"]["code"] == "too-expensive"
    assert answer.json()["error"]["field"] == "spins"
    assert server.counts()["portraits_started"] == 0


def test_one_computation_however_many_ask(server: RunningServer) -> None:
    before = server.counts()["portraits_started"]
    address = "/api/point?spins=61&points=12&at=0.6123"
    with ThreadPoolExecutor(4) as several:
        answers = list(several.map(lambda _: server.client.get(address), range(4)))
    assert {answer.status_code for answer in answers} == {200}
    assert len({answer.content for answer in answers}) == 1
    assert server.counts()["portraits_started"] == before + 1


def test_who_cannot_wait_asks_again(server: RunningServer) -> None:
    address = "/api/point?spins=400&at=0.71234"
    first = server.client.get(f"{address}&wait=0")
    assert first.status_code == 202
    assert first.headers["Retry-After"] == "1"
    assert server.client.get(address).status_code == 200
    assert server.client.get(f"{address}&wait=0").status_code == 200


def test_one_client_cannot_fill_the_queue(start_server: ServerFactory) -> None:
    server = start_server("--workers", "1")
    addresses = [f"/api/point?spins=700&at=0.6{digit}1&wait=0" for digit in range(8)]
    answers = [server.client.get(address) for address in addresses]
    refused = [answer for answer in answers if answer.status_code == 503]
    assert {answer.status_code for answer in answers} == {202, 503}
    assert refused[0].json()["error"]["code"] == "queue-full"
    assert refused[0].headers["Retry-After"] == "1"
    assert server.client.get("/api/sweep?spins=2&points=3").status_code == 200


def test_opening_the_page_computes_nothing(server: RunningServer) -> None:
    before = server.counts()
    page = server.client.get("/point?spins=7&at=0.3&title=%3Cb%3E&note=%3Ci%3E")
    assert page.status_code == 200
    assert "<b>" not in page.text
    assert "<i>" not in page.text
    assert 'href="sweep?spins=7' in page.text
    assert server.counts() == before


def test_long_links_are_kept_under_short_names(server: RunningServer) -> None:
    note = "x" * 1900
    page = server.client.get(f"/point?spins=3&points=5&to=1&at=0.5&note={note}")
    found = re.search(r'id="way-next" href="([^"]+)"', page.text)
    assert found is not None
    assert found.group(1).startswith("point?stored=")
    following = server.client.get(f"/{found.group(1)}")
    assert following.status_code == 200
    assert "λ = 0.75" in following.text


@pytest.mark.parametrize("query", ["spins=4&at=0.4", "spins=4&at=0.9&frame=trap", "ratio=0&at=0.2"])
def test_figures_of_a_point_are_its_numbers(server: RunningServer, query: str) -> None:
    found = point(server, query)
    figures = point_figures(place(query).sheet, found)
    for token in re.findall(r"token:([a-z0-9-]+)", str(figures)):
        assert f"--{token}:" in STYLESHEET, token
    bars = figures["distribution"]["data"][0]
    assert dict(zip(bars["x"], bars["y"], strict=True))[0] == found["portrait"]["distribution"][0]
    marked = [shape["x0"] for shape in figures["distribution"]["layout"]["shapes"]]
    assert marked == [found["portrait"]["mean"], found["series"]["cutoff_needed"][0] + 0.5]
    husimi = figures["husimi"]["data"][0]
    assert husimi["x"] == pytest.approx([-0.5 + 0.01 * step for step in range(201)])
    assert [row[0] for row in husimi["z"]] == [row[-1] for row in husimi["z"]]
    wigner = figures["wigner"]["data"][0]
    assert wigner["zmin"] == -wigner["zmax"]
    middle = found["portrait"]["wigner"]["values"][100][100]
    assert middle == pytest.approx(2.0 / math.pi * found["portrait"]["parity_of_n"], abs=1e-6)


def test_truncated_calculations_converge_to_the_point(server: RunningServer) -> None:
    answer = server.client.get("/api/point/convergence?spins=6&at=0.7&need=1e-4")
    assert answer.status_code == 200, answer.text
    found = answer.json()
    assert found["wanted"]["energies"] == 1e-4
    needed = point(server, "spins=6&at=0.7&need=1e-4")["series"]["cutoff_needed"][0]
    for basis in ("fock", "shifted"):
        row = found["bases"][basis]
        errors = row["error"]["energies"]
        assert row["cutoffs"][0] == 0
        assert row["cutoffs"][-1] >= (needed if basis == "fock" else 4)
        assert errors[-1] < 1e-4 < errors[0]
        assert row["error"]["boson_number"][-1] < 1e-2
        assert row["error"]["order_parameter"][-1] < 1e-3
    fock = found["bases"]["fock"]
    # the bound from one solve holds wherever it says something, up to the rounding of truncated solves
    pairs = zip(fock["error"]["energies"], fock["bound"]["energies"], strict=True)
    assert all(error <= bound + 1e-8 for error, bound in pairs if None not in (error, bound))
    names = {trace["name"] for trace in found["figure"]["data"]}
    assert names == {entry["label"] for entry in found["key"]} - {"error wanted"}


def test_an_unaffordable_comparison_is_refused(start_server: ServerFactory) -> None:
    server = start_server("--ceiling", "1")
    answer = server.client.get("/api/point/convergence?spins=2000&at=0.7")
    assert answer.status_code == 422
    assert answer.json()["error"]["code"] == "too-expensive"

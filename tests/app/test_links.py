"""Links and sheets: the same sheet, the same link, byte for byte; old links open for ever."""

import json
import math
from pathlib import Path
from typing import Any

import pytest
from hypothesis import assume, given
from hypothesis import strategies as st

from app import identity, links
from app.errors import SheetError
from app.keys import KEYS, SWEPT, number_text
from app.sheets import Sheet

OLD_LINKS = json.loads(Path(__file__).with_name("old_links.json").read_text())


def value_of(name: str) -> st.SearchStrategy[Any]:
    """Return values that one key may have."""
    key = KEYS.get(name) or SWEPT[name]
    if key.kind == "integer":
        return st.integers(int(key.low), int(key.high))
    if key.kind == "real":
        return (
            st.floats(key.low, key.high, allow_nan=False) | st.floats(max(key.low, 0.1), min(key.high, 3.0))
            if key.low < 3.0 and key.high > 0.1
            else st.floats(key.low, key.high)
        )
    if key.kind == "choice":
        return st.sampled_from(key.choices)
    if key.kind == "text":
        letters = st.characters(exclude_categories=("Cc", "Cs"))
        return st.text(letters, max_size=40)
    if key.kind == "interval":
        ends = st.floats(-1e6, 1e6)
        return st.tuples(ends, ends).filter(lambda pair: pair[0] < pair[1]).map(list)
    return st.sampled_from(sorted(SWEPT)).flatmap(
        lambda swept: st.lists(value_of(swept), min_size=1, max_size=8, unique=True).map(
            lambda values: {"name": swept, "values": values}
        )
    )


@st.composite
def sheets(draw: st.DrawFn) -> Sheet:
    """Draw any sheet that may be asked."""
    names = draw(st.lists(st.sampled_from(sorted(KEYS)), unique=True, max_size=8))
    given_keys = {name: draw(value_of(name)) for name in names}
    try:
        return Sheet.model_validate(given_keys)
    except SheetError:
        assume(False)
        raise


@given(sheets())
def test_sheet_to_link_to_sheet(sheet: Sheet) -> None:
    query = links.query_of(sheet)
    again = links.parse(query)
    assert again == sheet
    assert links.query_of(again) == query
    assert links.parse_link(f"http://127.0.0.1:8150{links.link_of(sheet)}") == sheet
    assert query.isascii()


@given(sheets())
def test_sheet_to_json_to_sheet(sheet: Sheet) -> None:
    data = json.loads(json.dumps(sheet.data(), allow_nan=False))
    assert list(data) == list(KEYS)
    assert Sheet.model_validate(data) == sheet
    assert Sheet.model_validate(sheet.explicit()) == sheet
    assert sheet.changed() == sheet


@given(st.floats(allow_nan=False, allow_infinity=False))
def test_number_text_is_short_and_reads_back(value: float) -> None:
    text = number_text(value)
    assert float(text) == value
    assert len(text) <= len(repr(value))
    assert "+" not in text


@pytest.mark.parametrize("old", OLD_LINKS, ids=lambda old: old["link"][:50])
def test_old_links_open_unchanged(old: dict[str, Any]) -> None:
    sheet = links.parse_link(old["link"])
    assert {name: sheet.data()[name] for name in old["sheet"]} == old["sheet"]
    assert links.link_of(sheet) == old["canonical"]
    assert links.parse_link(old["canonical"]) == sheet


def test_view_keys_leave_the_computation_alone() -> None:
    plain = links.parse("spins=7")
    shown = links.parse(
        "spins=7&title=x&note=y&unit=kHz&frame=trap&energies=ground&bosons=per-spin&at=0.1&zoom=0:0.5"
    )
    assert plain != shown
    assert identity.sheet_id(plain) == identity.sheet_id(shown)
    # the fixed value of what is swept is overridden
    assert identity.sheet_id(links.parse("coupling=0.1")) == identity.sheet_id(links.parse("coupling=0.7"))
    assert identity.sheet_id(links.parse("spins=8")) != identity.sheet_id(plain)


@pytest.mark.parametrize(
    ("typed", "query"),
    [
        (
            {"coupling": "0,25", "spins": " 4 ", "coupling_as": "single", "along": "bias"},
            "spins=4&along=bias",
        ),
        (
            {"coupling": "2", "coupling_as": "critical", "splitting": "4", "along": "bias"},
            "splitting=4&coupling=2&along=bias",
        ),
        ({"to": "1,5", "points": "151", "title": " a, b "}, "to=1.5&points=151&title=%20a,%20b%20"),
        ({"detuning": "\u22120,5", "tol": "1e-6", "from": ""}, "detuning=-0.5&tol=1e-6"),
        ({"each": "spins:5,10"}, "each=spins:5,10"),
    ],
)
def test_forms_take_comma_and_three_kinds_of_coupling(typed: dict[str, str], query: str) -> None:
    assert links.query_of(links.from_form(typed)) == query


@pytest.mark.parametrize(
    ("typed", "field"),
    [
        ({"coupling": "1.000,5"}, "coupling"),
        ({"coupling": "one"}, "coupling"),
        ({"coupling": "0.3", "coupling_as": "half"}, "coupling_as"),
        ({"coupling": 0.3}, "coupling"),
        ({"coupling": "9e5", "coupling_as": "single"}, "coupling"),
        ({"colour": "red"}, "colour"),
    ],
)
def test_forms_refuse_what_is_unclear(typed: dict[str, Any], field: str) -> None:
    with pytest.raises(SheetError) as caught:
        links.from_form(typed)
    assert caught.value.field == field
    assert caught.value.allowed


@pytest.mark.parametrize(
    "link",
    [
        "http://lab:8150/softmode/sweep?spins=3",
        "https://lab/softmode/?spins=3",
        "http://lab?spins=3",
        "/sweep?spins=3#plot",
        "sweep?spins=3",
        "?spins=3",
        " spins=3\n",
    ],
)
def test_links_are_read_with_and_without_host(link: str) -> None:
    assert links.query_of(links.parse_link(link)) == "spins=3"


@pytest.mark.parametrize(
    "link", ["http://[/sweep?spins=3", "http://lab/chart?spins=3", "ftp", "/sweeps?spins=3"]
)
def test_other_addresses_are_refused(link: str) -> None:
    with pytest.raises(SheetError):
        links.parse_link(link)


def test_default_ranges_follow_the_model() -> None:
    assert links.parse("splitting=4").stop == pytest.approx(1.5)
    assert links.parse("splitting=0").stop == 1.5
    assert links.parse("along=mode&mode=2").data()["from"] == 1.0
    assert links.parse("along=splitting&mode=2").stop == 4.0
    assert links.parse("along=spins").points == 20
    assert math.isclose(links.parse("ratio=0").stop, 1.5)


def test_changed_keeps_what_was_chosen_and_lets_defaults_follow() -> None:
    sheet = links.parse("spins=7&title=x")
    assert links.query_of(sheet.changed(splitting=4.0)) == "spins=7&splitting=4&title=x"
    assert sheet.changed(splitting=4.0).stop == pytest.approx(1.5)
    assert links.query_of(sheet.changed(spins=None, start=0.1)) == "from=0.1&title=x"

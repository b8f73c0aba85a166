"""Plans: every point once, coarse first, the same wherever they are made."""

import itertools

import pytest

from app import links, plan
from app.errors import PriceError

QUERIES = [
    "",
    "points=2",
    "points=9",
    "points=2001&spins=5",
    "each=spins:5,10,20&points=33",
    "along=spins&spins=300&points=77",
    "along=mode&detuning=0.5",
    "along=coupling-over-critical&each=splitting:0.5,2",
    "along=detuning&ratio=0.5&bias=0.1",
    "spins=1000&points=20",
]


@pytest.mark.parametrize("query", QUERIES)
def test_chunks_cover_every_point_once(query: str) -> None:
    sheet = links.parse(query)
    made = plan.make(sheet)
    covered = [point for chunk in made.chunks for point in chunk.points]
    assert sorted(covered) == list(range(len(made.questions)))
    assert [chunk.number for chunk in made.chunks] == list(range(len(made.chunks)))
    assert all(list(chunk.points) == sorted(chunk.points) for chunk in made.chunks)
    assert made == plan.make(links.parse(query))
    assert made.seconds == pytest.approx(sum(chunk.seconds for chunk in made.chunks))


@pytest.mark.parametrize("query", QUERIES)
def test_axis_has_exact_ends_and_grows(query: str) -> None:
    sheet = links.parse(query)
    axis = plan.axis_values(sheet)
    assert len(axis) == sheet.points
    assert (axis[0], axis[-1]) == (sheet.start, sheet.stop)
    assert all(low < high for low, high in itertools.pairwise(axis))


def test_ends_come_in_the_first_pass() -> None:
    made = plan.make(links.parse("points=101"))
    first = [point for chunk in made.chunks[:2] for point in chunk.points]
    assert {0, 100} <= set(first)
    assert len(first) < 25


def test_models_follow_the_sheet() -> None:
    sheet = links.parse("along=mode&detuning=0.5&coupling=0.3&ratio=0.5")
    model = plan.model_at(sheet, 2.0)
    assert (model.mode, model.splitting) == (2.0, 2.5)
    assert (model.rotating, model.counter) == (0.3, 0.15)
    critical = plan.model_at(links.parse("along=coupling-over-critical&each=splitting:4,9"), 0.5, 4.0)
    assert critical.rotating == pytest.approx(0.5)
    spins = plan.model_at(links.parse("along=spins"), 7)
    assert spins.spins == 7
    assert isinstance(spins.spins, int)
    assert plan.model_at(links.parse("along=splitting&detuning=3"), 0.25).splitting == 0.25


def test_ceilings_say_what_to_change() -> None:
    made = plan.make(links.parse("spins=500"))
    plan.check_price(made, made.seconds, made.peak_bytes)
    with pytest.raises(PriceError, match="fewer points") as caught:
        plan.check_price(made, made.seconds / 2, made.peak_bytes)
    assert caught.value.field == "points"
    with pytest.raises(PriceError, match="memory"):
        plan.check_price(made, made.seconds, made.peak_bytes - 1)

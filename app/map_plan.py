"""The plan of a map: a coarse grid, then the cells where the quantities bend, or all."""

from collections.abc import Mapping, Sequence
from typing import Any

import numpy as np

from app import plan
from app.map_refine import ALLOWED, Flags, Numbers, Survey, coarse_lines, coarse_survey, survey
from app.map_sheets import MapSheet
from app.plan import CHUNK_SECONDS, MOST_POINTS_IN_CHUNK, Chunk, Curve, Growth, Plan
from solver import CollectiveModel, PointQuestion, predicted_bytes, predicted_seconds

Row = Mapping[str, Any]

WORK = "cells"
# of the cells that may still be wanted, and of all cells before any is known
USUAL_SHARE = 0.4
# gaps far below this share of the mode frequency look the same: closed
CLOSED_GAP = 1e-3


def make(question: MapSheet) -> Plan:
    """Return the plan of a map; an adaptive one grows."""
    axis = plan.axis_values(question.sheet)
    drawn = tuple(Curve(question["across"], value, axis) for value in question.rows)
    points = tuple(question_at(question, x, curve.value or 0.0) for curve in drawn for x in axis)
    largest = max(points, key=predicted_bytes)
    prices = tuple(predicted_seconds(point) for point in points)
    shape = (len(drawn), len(axis))
    rows, columns = (coarse_lines(count) for count in shape)
    runs = [tuple(row * shape[1] + column for column in columns) for row in rows]
    seconds = sum(prices)
    everything = question["every"] == "all"
    if everything:
        coarse = {point for run in runs for point in run}
        runs += _runs([point for point in range(len(points)) if point not in coarse], shape, prices)
    chunks = tuple(Chunk(number, run, sum(prices[point] for point in run)) for number, run in enumerate(runs))
    first = sum(chunk.seconds for chunk in chunks)

    def grow(found: Sequence[Row | None]) -> Growth:
        return _growth(points, shape, prices, found)

    return Plan(
        drawn,
        points,
        chunks,
        seconds if everything else min(seconds, first + USUAL_SHARE * seconds),
        predicted_bytes(largest),
        largest.model,
        WORK,
        prices,
        None if everything else grow,
        later_seconds=0.0 if everything else USUAL_SHARE * (seconds - first),
    )


def model_at(question: MapSheet, x: float, y: float) -> CollectiveModel:
    """Return the model of a cell."""
    return plan.model_with(question.sheet, [(question["across"], y), (question.sheet.along, x)])


def question_at(question: MapSheet, x: float, y: float) -> PointQuestion:
    """Return what is asked at a cell."""
    sheet = question.sheet
    return PointQuestion(
        model=model_at(question, x, y),
        levels=sheet.levels,
        tolerance=sheet.tol,
        need=sheet.need,
        tail=sheet.tail,
    )


def survey_of(question: MapSheet, made: Plan, rows: Sequence[Row | None]) -> Survey:
    """Return how far a map is known, for a plan and the rows found so far."""
    shape = (int(question["rows"]), question.sheet.points)
    if question["every"] == "all":
        return coarse_survey(shape)
    return survey(_judged(made.questions, rows, shape), computed_cells(rows, shape))


def computed_cells(rows: Sequence[Row | None], shape: tuple[int, int]) -> Flags:
    """Return which cells are computed."""
    flags: Flags = np.fromiter((row is not None for row in rows), dtype=bool, count=len(rows)).reshape(shape)
    return flags


def _judged(
    questions: Sequence[PointQuestion], rows: Sequence[Row | None], shape: tuple[int, int]
) -> tuple[Numbers, ...]:
    """Return what decides where cells are computed: bosons per spin, order parameter, gap and its decades."""
    judged = np.full((len(ALLOWED), len(rows)), np.nan)
    for point, (question, row) in enumerate(zip(questions, rows, strict=True)):
        answer = None if row is None else row["answer"]
        if answer is None or answer["boson_number"] is None:
            continue
        model = question.model
        gap = answer["gap"] if answer["gap"] is not None else answer["gap_any"]
        # fewer than two levels have no gap: then it decides nothing
        open_gap = 1.0 if gap is None else max(gap, 0.0) / model.mode
        judged[:, point] = (
            answer["boson_number"] / model.spins,
            answer["order_parameter"],
            open_gap,
            np.log10(open_gap + CLOSED_GAP),
        )
    return tuple(values.reshape(shape) for values in judged)


def _growth(
    questions: Sequence[PointQuestion],
    shape: tuple[int, int],
    prices: Sequence[float],
    rows: Sequence[Row | None],
) -> Growth:
    computed = computed_cells(rows, shape)
    found = survey(_judged(questions, rows, shape), computed)
    undecided = np.zeros(shape, dtype=bool)
    for block in found.open:
        undecided[block.cells] = True
    wanted = [int(point) for point in np.flatnonzero(found.wanted)]
    later = np.flatnonzero(undecided & ~computed & ~found.wanted)
    return Growth(
        tuple(_runs(wanted, shape, prices)),
        int((~undecided & ~computed).sum()),
        USUAL_SHARE * sum(prices[int(point)] for point in later),
    )


def _runs(points: Sequence[int], shape: tuple[int, int], prices: Sequence[float]) -> list[tuple[int, ...]]:
    """Cut cells into runs of neighbours of similar price, every second row backwards."""
    if not points:
        return []
    ordered = sorted(points, key=lambda point: _along_the_way(point, shape[1]))
    total = sum(prices[point] for point in ordered)
    pieces = max(2, round(total / CHUNK_SECONDS + 0.5), -(-len(ordered) // MOST_POINTS_IN_CHUNK))
    share = total / min(pieces, len(ordered))
    runs: list[list[int]] = [[]]
    spent = 0.0
    for point in ordered:
        if runs[-1] and (spent >= share * len(runs) or len(runs[-1]) >= MOST_POINTS_IN_CHUNK):
            runs.append([])
        runs[-1].append(point)
        spent += prices[point]
    return [tuple(run) for run in runs]


def _along_the_way(point: int, columns: int) -> tuple[int, int]:
    row, column = divmod(point, columns)
    return row, column if row % 2 == 0 else -column

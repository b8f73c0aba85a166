"""Whatever stands in an address: a question that comes back as the same link, or a named refusal."""

import json
from collections.abc import Callable, Sequence
from random import Random
from typing import Any
from urllib.parse import quote

import pytest
from hypothesis import HealthCheck, given, settings
from hypothesis import strategies as st

from app import links
from app.cutoff_sheets import CUTOFF_KEYS
from app.errors import SoftmodeError
from app.keys import KEYS, SWEPT, Key, number_text
from app.places import MEMBER, STATE

EVERY = KEYS | CUTOFF_KEYS | {MEMBER.name: MEMBER, STATE.name: STATE}
# drawn with shrinking; and many more, drawn a batch at a time, because drawing takes longer than reading
EXAMPLES = 500
BATCHES, BATCH = 180, 25
MANY = settings(max_examples=EXAMPLES, deadline=None, database=None, suppress_health_check=list(HealthCheck))


def numbers(key: Key) -> st.SearchStrategy[str]:
    inside = (
        st.integers(int(key.low), int(key.high)).map(str)
        if key.kind == "integer"
        else st.floats(key.low, key.high, allow_nan=False).map(number_text)
    )
    outside = st.floats().map(str) | st.integers().map(str)
    odd = st.sampled_from(["", "+", "1e", "1e5", ".5", "5.", "1,5", "0x1", "1_0", "\u0661", "1e999", "-0"])
    return st.one_of(inside, inside, outside, odd)


def values(name: str) -> st.SearchStrategy[str]:
    key = EVERY[name]
    if key.kind in {"integer", "real"}:
        return numbers(key)
    if key.kind == "choice":
        return st.sampled_from(key.choices) | st.text(max_size=8)
    if key.kind == "names":
        return st.lists(st.sampled_from(key.choices), max_size=4).map(",".join) | st.text(max_size=8)
    if key.kind == "family":
        several = st.lists(st.floats(0.0, 10.0).map(number_text), max_size=9).map(",".join)
        return st.tuples(st.sampled_from([*SWEPT, "colour"]), several).map(":".join) | st.text(max_size=8)
    if key.kind == "interval":
        return st.lists(st.floats(-5.0, 5.0).map(number_text), min_size=1, max_size=3).map(":".join)
    return st.text(max_size=130)


PAIRS = st.sampled_from([*EVERY, "v", "spinz"]).flatmap(
    lambda name: st.tuples(st.just(name), values(name) if name in EVERY else st.text(max_size=5))
)
QUERIES = st.lists(PAIRS, max_size=6, unique_by=lambda pair: pair[0]).map(
    lambda pairs: "&".join(f"{name}={quote(value)}" for name, value in pairs)
)
PIECES = [*"&=%+:,.;?#/\\-0123456789aefspin\x00\x7f\n\u00e9\u2212", "%ff", "%00", "spins=", "each=", "ratio:"]
ADDRESSES = ["", "/sweep?", "/cutoff?", "http://[::1/sweep?", "//x:y/cutoff?"]
ODD = [
    "",
    "+",
    "1e",
    "1e5",
    ".5",
    "5.",
    "1,5",
    "0x1",
    "1_0",
    "\u0661",
    "1e999",
    "-0",
    "nan",
    "-inf",
    "1e-320",
]


def quick_value(random: Random, key: Key) -> str:  # noqa: PLR0911 - one for each kind of key
    if random.random() < 0.08:
        return random.choice(ODD)
    if key.kind in {"integer", "real"}:
        span = random.choice([(key.low, key.high), (0.0, 2.0), (1.0, 40.0), (-1e9, 1e9)])
        value = random.uniform(*span) if random.random() < 0.7 else random.choice(span)
        return (
            str(int(value)) if key.kind == "integer" or random.random() < 0.3 else number_text(float(value))
        )
    if key.kind == "choice":
        return random.choice(key.choices)
    if key.kind == "names":
        return ",".join(random.choices(key.choices, k=random.randint(1, 3)))
    several = [number_text(random.uniform(0.0, 5.0)) for _ in range(random.randint(1, 4))]
    if key.kind == "family":
        return f"{random.choice(list(SWEPT))}:{','.join(several)}"
    if key.kind == "interval":
        return ":".join(sorted(several[:2]))
    return "".join(random.choices(PIECES, k=random.randint(0, 130)))


def quick_query(random: Random, known: Sequence[str]) -> str:
    names = random.sample(known, random.randint(1, 6))
    return "&".join(f"{name}={quote(quick_value(random, EVERY[name]))}" for name in names)


def refusal(error: SoftmodeError) -> None:
    """Check that a refusal can be sent, and says which key is at fault and what is allowed."""
    body = error.body()
    json.dumps(body, allow_nan=False).encode()
    assert 400 <= error.status < 500
    assert body["error"]["code"]
    assert body["error"]["message"]
    assert body["error"]["field"] is not None


def same_again(question: Any, query: str, read: Any) -> None:
    """Check that a link reads back as the question it was written for, and is written the same way."""
    again = read(links.split_query(query))
    assert again == question
    json.dumps(again.data(), allow_nan=False)


def read_sweep(query: str) -> bool:
    try:
        sheet = links.parse(query)
    except SoftmodeError as error:
        refusal(error)
        return False
    written = links.query_of(sheet)
    same_again(sheet, written, links.from_pairs)
    assert links.query_of(links.parse(written)) == written
    return True


def read_cutoff(query: str) -> bool:
    try:
        question = links.cutoff_from_pairs(links.split_query(query))
    except SoftmodeError as error:
        refusal(error)
        return False
    written = links.cutoff_query(question)
    same_again(question, written, links.cutoff_from_pairs)
    assert links.cutoff_query(links.cutoff_from_pairs(links.split_query(written))) == written
    return True


def read_point(query: str) -> bool:
    query = query if "at=" in query else f"at=0.3&{query}"
    try:
        place = links.place_from_pairs(links.split_query(query))
    except SoftmodeError as error:
        refusal(error)
        return False
    written = links.place_query(place)
    assert links.place_query(links.place_from_pairs(links.split_query(written))) == written
    return True


Reader = Callable[[str], bool]
READERS: list[tuple[Reader, list[str]]] = [
    (read_sweep, list(KEYS)),
    (read_cutoff, [*KEYS, *CUTOFF_KEYS]),
    (read_point, [*KEYS, MEMBER.name, STATE.name, "at"]),
]
BY_READER = pytest.mark.parametrize(("read", "known"), READERS, ids=[read.__name__ for read, _ in READERS])


@pytest.mark.slow
@BY_READER
def test_questions(read: Reader, known: list[str]) -> None:
    taken = 0

    @MANY
    @given(QUERIES)
    def draw(query: str) -> None:
        nonlocal taken
        taken += read(query)

    draw()
    assert taken > EXAMPLES // 100, known


@pytest.mark.soak
@pytest.mark.slow
@BY_READER
def test_many_questions(read: Reader, known: list[str]) -> None:
    taken = 0

    @settings(MANY, max_examples=BATCHES)
    @given(st.randoms(use_true_random=True))
    def draw(random: Random) -> None:
        nonlocal taken
        taken += sum(read(quick_query(random, known)) for _ in range(BATCH))

    draw()
    # neither all good nor all bad
    assert BATCHES * BATCH // 50 < taken < BATCHES * BATCH


@pytest.mark.slow
@settings(MANY, max_examples=200)
@given(st.randoms(use_true_random=True))
def test_noise(random: Random) -> None:
    for _ in range(BATCH):
        noise = "".join(random.choices(PIECES, k=random.randint(0, 60)))
        for read in (links.parse_link, links.parse, links.split_query, links.stored_name):
            try:
                read(random.choice(ADDRESSES) + noise)
            except SoftmodeError as error:
                refusal(error)

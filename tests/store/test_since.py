"""What was stored after a record comes page by page, each record once and in order, at the cost of the page."""

from __future__ import annotations

from collections.abc import Callable, Iterator
from contextlib import contextmanager
from pathlib import Path

import pytest
import sqlalchemy as sa
from driftwatch.records import KINDS, Envelope, TimeQuality
from driftwatch.store import since as module
from driftwatch.store.queries import Reader
from driftwatch.store.since import Page, page, selected
from driftwatch.store.writer import Writer

Make = Callable[..., Envelope]
RUNS = [f"{number}f0e8f0e-1111-4222-8333-123456789abc" for number in (7, 3, 5)]


@pytest.fixture
def records(measurement: Make, alert: Make, run_record: Make) -> list[Envelope]:
    """Return three runs of several kinds; the time quality of the second one changes, and changes back."""
    makers = [run_record, measurement, measurement, alert, measurement]
    found = [makers[number % 5](number + 1, run=RUNS[0]) for number in range(12)]
    qualities = [TimeQuality.FREE, TimeQuality.SYNCHRONISED, TimeQuality.FREE]
    for number in range(30):
        found.append(makers[number % 5](number + 1, run=RUNS[1], time_quality=qualities[number // 10]))
    return [*found, *(makers[number % 5](number + 1, run=RUNS[2]) for number in range(5))]


@pytest.fixture
def store(tmp_path: Path, records: list[Envelope]) -> Iterator[Reader]:
    with Writer.open(tmp_path / "rows.db", "line 3") as writer:
        for number in range(0, len(records), 4):
            writer.write(records[number : number + 4])
    with Reader.open(tmp_path / "rows.db") as reader:
        yield reader


@pytest.mark.parametrize("most", [1, 2, 7, 1000])
def test_pages_from_any_record_on_give_all_that_follow_each_once(
    store: Reader, records: list[Envelope], most: int
) -> None:
    for begin in range(0, len(records), 1 if most > 5 else 11):
        run, sequence = records[begin].run, records[begin].sequence
        found: list[Envelope] = []
        more = True
        while more:
            one = page(store, run, sequence, most)
            assert (one.known, 0 < len(one.records) <= most or begin + 1 == len(records)) == (True, True)
            found += one.records
            more = one.more
            if found:
                run, sequence = found[-1].run, found[-1].sequence
        assert found == records[begin + 1 :]


def test_without_a_record_or_after_one_that_is_not_there_it_begins_at_the_oldest(
    store: Reader, records: list[Envelope]
) -> None:
    assert page(store, None, 0, 1000) == Page(tuple(records), more=False, known=True)
    assert page(store, "another", 17, 3) == Page(tuple(records[:3]), more=True, known=False)
    assert page(store, RUNS[2], 99, 3) == Page((), more=False, known=True)


def test_many_short_runs_are_shared_out_over_pages(
    store: Reader, records: list[Envelope], monkeypatch: pytest.MonkeyPatch
) -> None:
    monkeypatch.setattr(module, "MOST_RUNS", 2)
    assert page(store, None, 0, 1000) == Page(tuple(records[:42]), more=True, known=True)


def test_a_page_is_about_a_megabyte_at_most_and_never_empty(tmp_path: Path, alert: Make) -> None:
    with Writer.open(tmp_path / "long.db", "line 3") as writer:
        writer.write([alert(number, reason="x" * (2_000_000 if number == 1 else 100_000)) for number in range(1, 30)])
    with Reader.open(tmp_path / "long.db") as reader:
        first = page(reader, None, 0, 1000)
        second = page(reader, first.records[0].run, 1, 1000)
    assert ([one.sequence for one in first.records], first.more) == ([1], True)
    assert ([one.sequence for one in second.records], second.more) == (list(range(2, 11)), True)


def test_the_size_of_a_record_is_told_within_a_half(any_real: list[tuple[Envelope, int]]) -> None:
    for envelope, length in any_real:
        assert 0.9 < module._size(envelope) / length < 1.6, envelope.kind


@pytest.fixture
def any_real(measurement: Make, alert: Make, run_record: Make) -> list[tuple[Envelope, int]]:
    """Return plausible records with their length as JSON."""
    from driftwatch.bus.wire import encode_json

    long = [alert(123_456, reason="frequency 404.19 ± 0.58 Hz below 408 Hz for 3 s, probability over 0.99")]
    found = [measurement(123_456), run_record(1), *long]
    return [(envelope, len(encode_json(envelope))) for envelope in found]


@pytest.mark.parametrize("kind", KINDS)
def test_each_table_is_entered_at_its_primary_key_and_nothing_is_sorted(store: Reader, kind: str) -> None:
    with store.reading() as connection:
        text = str(selected(kind, 2, 17).compile(connection.engine, compile_kwargs={"literal_binds": True}))
        plan = [row[3] for row in connection.execute(sa.text(f"EXPLAIN QUERY PLAN {text}"))]
    assert plan == [f"SEARCH {kind} USING PRIMARY KEY (header=? AND sequence>?)"]


def test_a_page_costs_no_more_where_the_store_is_ten_times_as_large(tmp_path: Path, measurement: Make) -> None:
    """Cost in steps of the database's own machine, which are the same on every computer."""
    steps = []
    for count in (1000, 10_000):
        path = tmp_path / f"{count}.db"
        with Writer.open(path, "line 3") as writer:
            writer.write([measurement(number) for number in range(1, count + 1)])
        with Reader.open(path) as reader, _counted(reader) as spent:
            assert len(page(reader, measurement(1).run, count // 2, 200).records) == 200
        steps.append(spent())
    assert 0.8 < steps[1] / steps[0] < 1.25, steps


@contextmanager
def _counted(reader: Reader) -> Iterator[Callable[[], int]]:
    """Give what tells how many hundreds of steps were spent by a reader."""
    count = 0

    def tick() -> int:
        nonlocal count
        count += 1
        return 0

    def watch(connection: object, _: object) -> None:
        connection.set_progress_handler(tick, 100)  # type: ignore[attr-defined]

    sa.event.listen(reader._engine, "connect", watch)
    reader._engine.dispose()  # what is open already is not watched
    yield lambda: count

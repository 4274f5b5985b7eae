"""DATA files: fast where they are clean, exact everywhere, and every bad row named."""

import random
from collections.abc import Iterator
from pathlib import Path

import numpy as np
import pytest
from hypothesis import given, settings
from hypothesis import strategies as st

from quietmill.instant import parse_time
from quietmill.model import NO_TIME, Outcome
from quietmill.settings import Characteristic
from quietmill.study import arrow, columns, data
from quietmill.study.columns import DataError
from quietmill.study.data import Chunk, History

HEADER = "time,characteristic,value\n"


def characteristic(name: str, **more: object) -> Characteristic:
    return Characteristic.model_validate(
        {"id": name, "topic": f"t/{name}", "baseline": {"centre": 240.0, "sigma": 2.0}, **more}
    )


PLANT = [characteristic("press1.force"), characteristic("press2.force")]


@pytest.fixture(params=["with pyarrow", "without pyarrow"])
def reader(request: pytest.FixtureRequest, monkeypatch: pytest.MonkeyPatch) -> None:
    if request.param == "without pyarrow":
        monkeypatch.setattr(arrow, "pa", None)
    else:
        assert arrow.pa is not None


def read(path: Path, wide: bool = False) -> tuple[np.ndarray, list[tuple[int, str]]]:
    """Return all readings, and line and outcome of each refusal."""
    chunks = list(History(PLANT, wide).read(path))
    readings = np.concatenate([chunk.readings for chunk in chunks])
    return readings, [(refusal.line, refusal.outcome.label) for chunk in chunks for refusal in chunk.refusals]


def written(tmp_path: Path, text: str | bytes, name: str = "d.csv") -> Path:
    path = tmp_path / name
    path.write_bytes(text if isinstance(text, bytes) else text.encode())
    return path


@pytest.mark.usefixtures("reader")
def test_rows_become_readings(tmp_path: Path) -> None:
    text = HEADER + "2026-03-02T08:14:30Z,press2.force,241.5\n2026-03-02T08:14:30.25Z,press1.force,-0.0\n"
    readings, refusals = read(written(tmp_path, text))
    assert readings["row"].tolist() == [1, 0]
    assert readings["time"].tolist() == [1772439270000000, 1772439270250000]
    assert readings["value"].tolist() == [241.5, 0.0]
    assert readings["message"].tolist() == [0, 1]
    assert readings["fingerprint"].tolist() == [np.float64(241.5).view(np.uint64), 0]
    assert set(readings["arrival"].tolist()) == set(readings["sequence"].tolist()) == {NO_TIME}
    assert refusals == []


@pytest.mark.usefixtures("reader")
def test_every_bad_row_is_named_by_line_and_outcome_and_the_rest_goes_on(tmp_path: Path) -> None:
    rows = {
        "2026-03-02T08:14:30Z,press1.force,241.5": None,
        "yesterday,press1.force,241": "bad_time",
        "2026-03-02T08:14:30,press1.force,241": "bad_time",  # without an offset
        "2026-03-02T08:14:31Z,press1.force,1e999": "not_a_number",
        "2026-03-02T08:14:32Z,press1.force,1_000": "not_a_number",
        "2026-03-02T08:14:33Z,press1.force,NaN": "not_a_number",
        "2026-03-02T08:14:34Z,press9.force,240": "unrouted",
        "2026-03-02T08:14:35Z,press1.force": "no_member",
        "2026-03-02T08:14:36Z,press1.force,": "no_member",
        ",press1.force,240": "no_member",
        "2026-03-02T08:14:37Z,press1.force,9e99": "out_of_range",
        '2026-03-02T08:14:38Z,press1.force,"240,5"': "not_a_number",
        "2026-13-02T08:14:39Z,press1.force,240": "bad_time",
        " 2026-03-02t08:14:40+01:00 , press1.force , 240 ": None,
        "1772439281,press2.force,239": None,
        "1772439282000.5,press2.force,239": None,
    }
    readings, refusals = read(written(tmp_path, HEADER + "\n".join(rows) + "\n"))
    assert refusals == [(line, outcome) for line, outcome in enumerate(rows.values(), start=2) if outcome]
    assert readings["time"].tolist() == [
        1772439270000000,
        parse_time("2026-03-02T07:14:40Z"),
        1772439281000000,
        1772439282000500,
    ]


def rows_of(count: int, seed: int, dirty: float) -> str:
    """Return rows of which some are unusual or bad."""
    stream, lines = random.Random(seed), []
    for step in range(count):
        value, when = (
            f"{stream.gauss(240, 2):.3f}",
            f"2026-03-02T{step // 3600 % 24:02}:{step // 60 % 60:02}:{step % 60:02}Z",
        )
        if stream.random() < dirty:
            value = stream.choice(["", "x", "1e999", " 240 ", "1e400", "-0", "240.0000000000000000001"])
        if stream.random() < dirty:
            when = stream.choice(["", "1772439281", "2026-03-02T08:14:30.1234567Z", "2026-02-30T00:00:00Z", "x"])
        name = stream.choice(["press1.force", "press2.force", "press1.force"] + ["press3.force"] * (dirty > 0))
        lines.append(f"{when},{name},{value}")
    return HEADER + "\n".join(lines) + "\n"


@settings(max_examples=30)
@given(st.integers(0, 10**6), st.sampled_from([0.0, 0.002, 0.2]), st.sampled_from([7, 64, 32_768]))
def test_fast_and_exact_reading_give_the_same(
    tmp_path_factory: pytest.TempPathFactory, seed: int, dirty: float, rows: int
) -> None:
    path = written(tmp_path_factory.mktemp("data"), rows_of(400, seed, dirty))
    with pytest.MonkeyPatch.context() as patch:
        patch.setattr(columns, "CHUNK_ROWS", rows)
        patch.setattr(arrow, "BLOCK_BYTES", 64 * rows)
        fast, fast_refusals = read(path)
        patch.setattr(arrow, "pa", None)
        plain, plain_refusals = read(path)
        patch.setattr(History, "_at_once", raise_doubt)
        slow, slow_refusals = read(path)
    assert fast.tobytes() == plain.tobytes() == slow.tobytes()
    assert fast_refusals == plain_refusals == slow_refusals


def raise_doubt(*_: object) -> None:
    raise data._DoubtError


def test_adjacent_rows_of_a_message_are_one_also_across_chunks(tmp_path: Path, monkeypatch: pytest.MonkeyPatch) -> None:
    monkeypatch.setattr(columns, "CHUNK_ROWS", 2)
    rows = [
        "a,press1.force,1",
        "a,press2.force,2",
        "a,press1.force,3",
        ",press1.force,4",
        ",press1.force,5",
        "b,press1.force,6",
    ]
    text = "message,characteristic,value,time\n" + "".join(
        f"{row},177243927{place}\n" for place, row in enumerate(rows)
    )
    readings, _ = read(written(tmp_path, text))
    first, *rest = readings["message"].tolist()
    assert [number - first for number in rest] == [0, 0, 3, 4, 5]
    assert len(set(readings["fingerprint"][:3].tolist())) == 1
    assert readings["fingerprint"][3:].tolist() == readings["value"][3:].view(np.uint64).tolist()


def test_sequence_and_arrival_are_read_where_they_are(tmp_path: Path) -> None:
    rows = ["10,press1.force,1,7,11", "12,press1.force,1,,", "13,press1.force,1,x,14"]
    text = "\n".join(["time,characteristic,value,sequence,arrival", *rows])
    readings, refusals = read(written(tmp_path, text))
    assert readings["sequence"].tolist() == [7, NO_TIME]
    assert readings["arrival"].tolist() == [11_000_000, NO_TIME]
    assert refusals == [(4, "not_a_number")]


def test_a_wide_file_has_a_column_for_each_characteristic(tmp_path: Path) -> None:
    text = "time,press1.force,press2.force\n10,240,241\n20,,242\n30,243,\n"
    readings, refusals = read(written(tmp_path, text), wide=True)
    assert readings["row"].tolist() == [0, 1, 1, 0]
    assert readings["value"].tolist() == [240, 241, 242, 243]
    assert readings["time"].tolist() == [10_000_000, 10_000_000, 20_000_000, 30_000_000]
    assert refusals == []


def test_messages_are_numbered_through_all_files(tmp_path: Path) -> None:
    history = History(PLANT)
    paths = [written(tmp_path, HEADER + f"{when},press1.force,240\n", f"{when}.csv") for when in (10, 20)]
    chunks: Iterator[Chunk] = (chunk for path in paths for chunk in history.read(path))
    assert [chunk.readings["message"].tolist() for chunk in chunks] == [[0], [1]]


@pytest.mark.usefixtures("reader")
@pytest.mark.parametrize(
    ("content", "said"),
    [
        (b"", "is empty"),
        (b"a,b\n1,2\n", "lacks time, characteristic, value"),
        (b"time,press1.force\n1,2\n", "use --wide"),
        (b"\x7fELF\x02\x01\x01\x00\x00\xff\xfe\n", "is not CSV text"),
    ],
)
def test_a_file_that_is_no_data_gets_one_clear_error(tmp_path: Path, content: bytes, said: str) -> None:
    with pytest.raises(DataError, match=said):
        read(written(tmp_path, content))


def test_a_missing_file_a_folder_and_a_foreign_format_are_named(tmp_path: Path) -> None:
    for path, said in (
        (tmp_path / "none.csv", "cannot be read"),
        (tmp_path, "is a folder"),
        (tmp_path / "x.parquet", "give CSV"),
    ):
        with pytest.raises(DataError, match=said):
            read(path)


@pytest.mark.usefixtures("reader")
def test_text_that_is_not_utf_8_costs_its_row_only(tmp_path: Path) -> None:
    content = HEADER.encode() + b"10,press1.force,240\n11,pre\xffss,240\n12,press1.force,241\n"
    readings, refusals = read(written(tmp_path, content))
    assert readings["value"].tolist() == [240, 241]
    assert refusals == [(3, "unrouted")]


def test_an_outcome_counts_once_a_row(tmp_path: Path) -> None:
    chunks = list(History(PLANT).read(written(tmp_path, rows_of(300, 1, 0.3))))
    assert sum(len(chunk.readings) + len(chunk.refusals) for chunk in chunks) == 300
    assert Outcome.ACCEPTED not in {refusal.outcome for chunk in chunks for refusal in chunk.refusals}

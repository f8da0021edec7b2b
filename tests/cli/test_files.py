"""Files of observations, cut into chunks."""

import pytest

from service.cli.files import BadLine, Numbered, chunked, read_csv, read_ndjson


def test_a_csv_row_becomes_an_observation() -> None:
    lines = ["time, failed,unit,observed_at\n", "41.5,true,u 1,\n", "\n", "200,0,,2031-05-04T09:30:00Z\n"]
    assert list(read_csv(lines)) == [
        Numbered(2, {"time": 41.5, "failed": True, "unit": "u 1"}),
        Numbered(4, {"time": 200, "failed": False, "observed_at": "2031-05-04T09:30:00Z"}),
    ]


def test_numbers_of_csv_are_plain_ones() -> None:
    rows = list(read_csv(["value\n", *(f"{cell}\n" for cell in ("7", "+7", "-7.5", ".5", "7.", "1e3"))]))
    assert [row.observation["value"] for row in rows] == [7, 7, -7.5, 0.5, 7.0, 1000.0]


def test_a_row_of_two_arms_is_a_pair() -> None:
    rows = list(read_csv(["a,b,unit\n", "0,1,p-7\n", "10.5,-3,\n"]))
    assert [row.observation for row in rows] == [{"a": 0, "b": 1, "unit": "p-7"}, {"a": 10.5, "b": -3}]


def test_a_row_of_one_arm_names_it() -> None:
    (row,) = read_csv(["arm,value\n", "b, 10.5\n"])
    assert row.observation == {"arm": "b", "value": 10.5}


def test_ndjson_takes_objects_and_bare_numbers() -> None:
    assert list(read_ndjson(['{"value": 1}\n', "\n", "0\n"], "value")) == [
        Numbered(1, {"value": 1}),
        Numbered(3, {"value": 0}),
    ]
    assert list(read_ndjson(["12.5"], "time")) == [Numbered(1, {"time": 12.5, "failed": True})]


@pytest.mark.parametrize(
    ("lines", "message"),
    [
        (["value,colour\n", "1,red\n"], "line 1: the header must name fields"),
        ([], "line 1: the header"),
        (["value\n", "0\n", "x\n"], "line 3: value must be a number; received 'x'"),
        (["value\n", "nan\n"], "line 2: value must be a number; received 'nan'"),
        (["value\n", "1_0\n"], "line 2: value must be a number; received '1_0'"),
        (["value\n", "1e999\n"], "line 2: value must be a number; received '1e999'"),
        (["value,size\n", "0\n"], "line 2: has 1 cells, the header 2"),
        (["time,failed\n", "1,perhaps\n"], "line 2: failed must be true or false"),
    ],
)
def test_a_bad_line_of_csv_is_named(lines: list[str], message: str) -> None:
    with pytest.raises(BadLine, match=message.replace("(", r"\(")):
        list(read_csv(lines))


@pytest.mark.parametrize("text", ["{", "true", '"x"', "[1]", "NaN", "1e999", '{"value": 1, "unit": "\\ud800"}'])
def test_a_bad_line_of_ndjson_is_named(text: str) -> None:
    with pytest.raises(BadLine, match="line 2"):
        list(read_ndjson(["1\n", text], "value"))


def test_chunks_have_keys_of_their_own_that_stay_the_same() -> None:
    rows = [Numbered(i, {"value": 0}) for i in range(1, 11)]
    first, second = list(chunked(rows, 4, "lot.csv")), list(chunked(rows, 4, "lot.csv"))
    assert [len(chunk.rows) for chunk in first] == [4, 4, 2]
    keys = [chunk.idempotency_key for chunk in first]
    assert keys == [chunk.idempotency_key for chunk in second]
    assert len(set(keys)) == 3
    assert not set(keys) & {chunk.idempotency_key for chunk in chunked(rows, 4, "other.csv")}


def test_a_chunk_that_has_grown_keeps_its_key_and_what_is_skipped_still_counts_for_the_next() -> None:
    rows = [Numbered(i, {"value": i}) for i in range(1, 11)]
    short, grown = list(chunked(rows[:6], 4, "lot.csv")), list(chunked(rows, 4, "lot.csv"))
    assert [chunk.idempotency_key for chunk in short] == [chunk.idempotency_key for chunk in grown][:2]
    (rest,) = chunked(rows, 4, "lot.csv", skip=8)
    assert rest == grown[2]

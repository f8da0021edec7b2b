"""Files of observations, cut into chunks."""

import pytest

from service.cli.files import BadLine, Numbered, chunked, read_csv, read_ndjson


def test_a_csv_row_becomes_an_observation() -> None:
    lines = ["time, failed,unit,observed_at\n", "41.5,true,u 1,\n", "\n", "200,0,,2031-05-04T09:30:00Z\n"]
    assert list(read_csv(lines)) == [
        Numbered(2, {"time": 41.5, "failed": True, "unit": "u 1"}),
        Numbered(4, {"time": 200, "failed": False, "observed_at": "2031-05-04T09:30:00Z"}),
    ]


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
        (["value,size\n", "0\n"], "line 2: has 1 cells, the header 2"),
        (["time,failed\n", "1,perhaps\n"], "line 2: failed must be true or false"),
    ],
)
def test_a_bad_line_of_csv_is_named(lines: list[str], message: str) -> None:
    with pytest.raises(BadLine, match=message.replace("(", r"\(")):
        list(read_csv(lines))


@pytest.mark.parametrize("text", ["{", "true", '"x"', "[1]"])
def test_a_bad_line_of_ndjson_is_named(text: str) -> None:
    with pytest.raises(BadLine, match="line 2"):
        list(read_ndjson(["1\n", text], "value"))


def test_chunks_have_keys_of_their_own_that_stay_the_same() -> None:
    rows = [Numbered(i, {"value": 0}) for i in range(1, 11)]
    first, second = list(chunked(rows, 4, "lot")), list(chunked(rows, 4, "lot"))
    assert [len(chunk.rows) for chunk in first] == [4, 4, 2]
    keys = [chunk.idempotency_key for chunk in first]
    assert keys == [chunk.idempotency_key for chunk in second]
    assert len(set(keys)) == 3
    assert not set(keys) & {chunk.idempotency_key for chunk in chunked(rows, 4, "other")}
    assert not set(keys) & {chunk.idempotency_key for chunk in chunked(rows, 5, "lot")}

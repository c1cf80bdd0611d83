from decimal import Decimal

import numpy as np
import pandas as pd
import pyarrow as pa
import pyarrow.dataset as ds
import pyarrow.parquet as pq
import pytest

from steelyard.data.source import open_extract
from steelyard.data.values import values_of
from steelyard.errors import ExtractError


def frame(n=50, seed=0):
    rng = np.random.default_rng(seed)
    return pd.DataFrame({"x": rng.normal(size=n), "k": np.arange(n), "t": rng.choice(["a", "b", "c"], n)})


def everything(extract, columns, size=7):
    starts, tables = zip(*extract.read(columns, size), strict=True)
    assert list(starts) == list(range(0, extract.rows, size))
    assert all(t.num_rows == size for t in tables[:-1])
    return pa.concat_tables(
        [pa.table({n: t[n].cast(pa.string()) for n in columns}) for t in tables]
    ).to_pydict()


def test_every_way_to_name_an_extract_gives_the_same_rows(tmp_path):
    whole = frame()
    folder = tmp_path / "parts"
    folder.mkdir()
    for i in range(5):
        pq.write_table(
            pa.Table.from_pandas(whole[i * 10 : i * 10 + 10]), folder / f"part-{i}.parquet", row_group_size=3
        )
    (folder / "_SUCCESS").write_text("")
    (folder / ".hidden.parquet").write_text("not parquet")
    pq.write_table(pa.Table.from_pandas(whole), tmp_path / "whole.parquet", row_group_size=13)
    ways = [
        "whole.parquet",
        [f"parts/part-{i}.parquet" for i in range(5)],
        "parts",
        "parts/part-*.parquet",
        str(folder / "part-?.parquet"),
        whole,
        pa.Table.from_pandas(whole),
        ds.dataset([str(folder / f"part-{i}.parquet") for i in range(5)]),
    ]
    expected = everything(open_extract(whole), ["t", "k", "x"])
    for way in ways:
        extract = open_extract(way, tmp_path)
        assert extract.rows == 50
        assert everything(extract, ["t", "k", "x"]) == expected
        assert extract.columns["x"] == "number"
        assert extract.columns["t"] == "category"


def test_every_type_becomes_a_number_or_a_category():
    table = pa.table(
        {
            "i8": pa.array([1, None, 3], pa.int8()),
            "u32": pa.array([1, 2, None], pa.uint32()),
            "f32": pa.array([1.5, None, float("nan")], pa.float32()),
            "dec": pa.array([Decimal("1.25"), None, Decimal("-3.50")], pa.decimal128(6, 2)),
            "b": pa.array([True, None, False]),
            "text": pa.array(["x", None, "y"]),
            "large": pa.array(["x", None, "y"], pa.large_string()),
            "dict": pa.array(["x", None, "y"]).dictionary_encode(),
            "numbers": pa.array([5, None, 7]).dictionary_encode(),
            "empty": pa.nulls(3),
            "date": pa.array([1, 2, 3], pa.date32()),
        }
    )
    extract = open_extract(table)
    assert extract.columns["date"] == "other"
    ((_, read),) = extract.read(list(extract.columns))
    for name, expected in {
        "i8": [1, np.nan, 3],
        "u32": [1, 2, np.nan],
        "f32": [1.5, np.nan, np.nan],
        "dec": [1.25, np.nan, -3.5],
        "b": [1, np.nan, 0],
        "numbers": [5, np.nan, 7],
        "empty": [np.nan] * 3,
    }.items():
        np.testing.assert_array_equal(values_of(read[name], ()), expected)
    for name in ("text", "large", "dict"):
        values = values_of(read[name], (), ["w", "x", "y"])
        assert (values[0], values[2]) == ("x", "y")
        assert list(values.categories) == ["w", "x", "y"]
        assert values.isna().tolist() == [False, True, False]


def test_missing_codes_become_missing():
    table = pa.table({"n": [1, 98, 99], "t": ["a", "DK", "b"]})
    ((_, read),) = open_extract(table).read(["n", "t"])
    np.testing.assert_array_equal(values_of(read["n"], (98, 99)), [1, np.nan, np.nan])
    values = values_of(read["t"], ("DK",))
    assert list(values.categories) == ["a", "b"]
    assert values.isna().tolist() == [False, True, False]


def test_large_ids_keep_their_digits(tmp_path):
    ids = [2**60, 2**60 + 1]
    pq.write_table(pa.table({"id": pa.array(ids, pa.int64())}), tmp_path / "a.parquet")
    ((_, read),) = open_extract("a.parquet", tmp_path).read(["id"])
    assert read["id"].to_pylist() == ids


def test_widths_may_differ_between_files_but_kinds_may_not(tmp_path):
    pq.write_table(pa.table({"x": pa.array([1, 2], pa.int8()), "t": ["a", "b"]}), tmp_path / "1.parquet")
    two = pa.table({"x": pa.array([1.5, None], pa.float32()), "t": pa.array(["c", "a"]).dictionary_encode()})
    pq.write_table(two, tmp_path / "2.parquet")
    assert everything(open_extract("*.parquet", tmp_path), ["x", "t"], 4) == {
        "x": ["1", "2", "1.5", None],
        "t": ["a", "b", "c", "a"],
    }
    pq.write_table(pa.table({"x": ["1", "2"], "t": ["a", "b"]}), tmp_path / "3.parquet")
    with pytest.raises(
        ExtractError, match=r'Column "x" is .* in 1.parquet but string in 3.parquet.*one type'
    ):
        open_extract("*.parquet", tmp_path)


def test_what_is_wrong_with_a_file_is_told(tmp_path):
    with pytest.raises(ExtractError, match=r'no file "gone.parquet"'):
        open_extract("gone.parquet", tmp_path)
    with pytest.raises(ExtractError, match=r'No file matches "g\*.parquet"'):
        open_extract("g*.parquet", tmp_path)
    (tmp_path / "text.parquet").write_text("income,age\n1,2\n")
    with pytest.raises(ExtractError, match=r"text.parquet is not a whole Parquet file"):
        open_extract("text.parquet", tmp_path)
    pq.write_table(pa.Table.from_pandas(frame(5000)), tmp_path / "full.parquet")
    data = (tmp_path / "full.parquet").read_bytes()
    (tmp_path / "cut.parquet").write_bytes(data[: len(data) // 2])
    with pytest.raises(ExtractError, match=r"cut.parquet is not a whole Parquet file.*cut short"):
        open_extract("cut.parquet", tmp_path)
    pq.write_table(pa.Table.from_pandas(frame(0)), tmp_path / "none.parquet")
    with pytest.raises(ExtractError, match="no rows"):
        open_extract("none.parquet", tmp_path)
    with pytest.raises(ExtractError, match="cannot be a int"):
        open_extract(3)


def test_a_file_damaged_inside_is_told(tmp_path):
    path = tmp_path / "a.parquet"
    pq.write_table(pa.Table.from_pandas(frame(5000)), path, write_page_checksum=True)
    data = bytearray(path.read_bytes())
    data[2000:2100] = bytes(100)
    path.write_bytes(data)
    extract = open_extract("a.parquet", tmp_path)
    with pytest.raises(ExtractError, match=r"a.parquet is not a whole Parquet file"):
        list(extract.read(["x", "t"]))


def test_a_file_that_vanished_or_changed_between_readings_is_told(tmp_path):
    path = tmp_path / "a.parquet"
    pq.write_table(pa.Table.from_pandas(frame(10)), path)
    extract = open_extract("a.parquet", tmp_path)
    assert len(list(extract.read(["x"]))) == 1
    # The same rows and columns, other values: only the file's date or size can tell.
    pq.write_table(pa.Table.from_pandas(frame(10, seed=1)), path)
    with pytest.raises(ExtractError, match=r"a.parquet has changed since it was opened.*Run again"):
        list(extract.read(["x"]))
    path.unlink()
    for again in (lambda: list(extract.read(["x"])), extract.digests):
        with pytest.raises(ExtractError, match=r"^a.parquet cannot be read any more.*Put the file back"):
            again()


def test_a_missing_column_is_told_with_its_nearest_name():
    with pytest.raises(ExtractError, match=r'"agee".*in memory does not have.*Did you mean "age"'):
        open_extract(pd.DataFrame({"age": [1]})).require(["agee"])


def test_digests_are_those_of_the_files(tmp_path):
    import hashlib

    pq.write_table(pa.Table.from_pandas(frame(20)), tmp_path / "a.parquet")
    found = open_extract("a.parquet", tmp_path).digests().iloc[0]
    data = (tmp_path / "a.parquet").read_bytes()
    assert (found["file"], found["rows"], found["bytes"]) == ("a.parquet", 20, len(data))
    assert found["sha256"] == hashlib.sha256(data).hexdigest()


def test_a_column_that_one_file_lacks_is_told_with_the_file(tmp_path):
    pq.write_table(pa.table({"age": [1], "income": [2]}), tmp_path / "1.parquet")
    pq.write_table(pa.table({"age": [1], "incme": [2]}), tmp_path / "2.parquet")
    extract = open_extract("*.parquet", tmp_path)
    assert everything(extract, ["age"], 2) == {"age": ["1", "1"]}
    with pytest.raises(ExtractError, match=r'"income", which 2.parquet does not have.*Did you mean "incme"'):
        next(extract.read(["age", "income"]))


def test_a_column_that_stands_twice_is_refused_when_it_is_used():
    table = pa.Table.from_arrays([pa.array([1]), pa.array([2]), pa.array([3])], names=["a", "b", "b"])
    extract = open_extract(table)
    assert everything(extract, ["a"], 1) == {"a": ["1"]}
    with pytest.raises(ExtractError, match=r'Column "b" stands 2 times in the extract in memory.*Rename'):
        next(extract.read(["b"]))


def test_a_file_named_twice_is_refused(tmp_path):
    pq.write_table(pa.Table.from_pandas(frame()), tmp_path / "a.parquet")
    for twice in (["a.parquet", "a.parquet"], ["a.parquet", "*.parquet"], ["a.parquet", tmp_path]):
        with pytest.raises(ExtractError, match=r'"a.parquet" is named 2 times.*Name it once'):
            open_extract(twice, tmp_path)


def test_a_list_of_what_is_no_file_name_is_refused():
    with pytest.raises(ExtractError, match=r"no file name: DataFrame.*into one first"):
        open_extract([frame(), frame()])


def test_whole_numbers_of_any_width_and_wide_decimals_keep_their_digits():
    large = 2**60
    for kind in (pa.uint64(), pa.decimal128(38, 0), pa.decimal128(20, 0), pa.decimal256(60, 0)):
        values = [large, large + 1]
        column = pa.array([Decimal(v) for v in values] if pa.types.is_decimal(kind) else values, kind)
        ((_, read),) = open_extract(pa.table({"id": column})).read(["id"])
        assert read["id"].to_pylist() == values


def test_a_number_that_its_type_cannot_hold_is_told(tmp_path):
    table = pa.table({"id": pa.array([2**63], pa.uint64())})
    with pytest.raises(ExtractError, match=r'"id" of the extract in memory is uint64.*text if it is an id'):
        list(open_extract(table).read(["id"]))
    pq.write_table(pa.table({"id": [2**60 + 1]}), tmp_path / "1.parquet")
    pq.write_table(pa.table({"id": [1.0]}), tmp_path / "2.parquet")
    with pytest.raises(ExtractError, match=r'"id" of 1.parquet is int64.*double cannot hold exactly'):
        list(open_extract("*.parquet", tmp_path).read(["id"]))


def test_names_shown_are_never_machine_paths(tmp_path):
    (tmp_path / "plan").mkdir()
    (tmp_path / "plan" / "in").mkdir()
    pq.write_table(pa.Table.from_pandas(frame()), tmp_path / "plan" / "in" / "a.parquet")
    pq.write_table(pa.Table.from_pandas(frame()), tmp_path / "b.parquet")
    extract = open_extract(["in/a.parquet", "../b.parquet"], tmp_path / "plan")
    assert extract.digests()["file"].tolist() == ["in/a.parquet", "b.parquet"]


def test_one_large_row_group_is_not_held_at_once(tmp_path):
    # 16 columns of noise, 200,000 rows: 24 MiB that nothing compresses, all in one row group.
    rng = np.random.default_rng(0)
    table = pa.table({f"x{j}": rng.normal(size=200_000) for j in range(16)})
    pq.write_table(table, tmp_path / "a.parquet", row_group_size=200_000, use_dictionary=False)
    del table
    extract = open_extract("a.parquet", tmp_path)
    held = pa.total_allocated_bytes()
    highest = 0
    for _, run in extract.read(list(extract.columns), 8192):
        highest = max(highest, pa.total_allocated_bytes() - held)
        del run
    whole = 200_000 * 16 * 8
    assert highest < whole * 0.75

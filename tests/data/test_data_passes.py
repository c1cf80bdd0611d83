import time
from concurrent.futures import ProcessPoolExecutor, ThreadPoolExecutor

import numpy as np
import pytest

from steelyard.data.passes import Engine, add, threads


def square(block):
    return {"sum": np.float64(block) ** 2, "pair": (1, np.array([block, 1.0]))}


def slow_when_even(block):
    time.sleep(0.002 * (block % 2 == 0))
    return [block]


def test_parts_add_up_whatever_their_shape():
    got = Engine().run("squares", range(1, 101), square)
    assert got["sum"] == 338_350
    assert got["pair"][0] == 100
    np.testing.assert_array_equal(got["pair"][1], [5050, 100])
    assert add((1, {"a": 2}), (3, {"a": 4})) == (4, {"a": 6})


@pytest.mark.parametrize("count", [1, 2, 3, 7, 8, 100])
def test_parts_merge_in_order_however_many_workers(count):
    alone = Engine().run("order", range(count), slow_when_even)
    with threads(4) as engine:
        assert engine.run("order", range(count), slow_when_even) == alone == list(range(count))


def test_the_tree_of_merges_depends_on_the_number_of_blocks_alone():
    def merge(left, right):
        return f"({left}{right})"

    expected = Engine().run("tree", range(11), str, merge)
    assert expected == "((((01)(23))((45)(67)))((89)10))"
    with ThreadPoolExecutor(3) as pool:
        assert Engine(pool, window=2).run("tree", range(11), str, merge) == expected


def test_any_executor_will_do():
    with ProcessPoolExecutor(2) as pool:
        got = Engine(pool).run("squares", range(1, 11), square)
    assert got["sum"] == 385


def test_progress_counts_blocks_and_errors_come_through():
    told = []
    Engine(progress=lambda *args: told.append(args)).run("work", range(3), square)
    assert told == [("work", 1, 3), ("work", 2, 3), ("work", 3, 3)]
    with threads(2) as engine, pytest.raises(TypeError):
        engine.run("work", [1, None, 2], square)
    with pytest.raises(ValueError, match="no blocks"):
        Engine().run("work", [], square)

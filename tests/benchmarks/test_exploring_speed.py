"""Time of three epochs of exploring the reference problem, on one core and on two."""

from __future__ import annotations

import pytest
from conditions import awake, compiled_reference
from pytest_benchmark.fixture import BenchmarkFixture

from stackopt.explore import Explorer
from stackopt.stock import Stock

EPOCHS = 3


@pytest.mark.parametrize("count", [1, 2])
def test_exploring(benchmark: BenchmarkFixture, count: int) -> None:
    stock = Stock(compiled_reference("12_db_more"))
    with awake(count) as workers:
        Explorer(stock, 1, 200, workers=workers).step()  # loads what it needs
        explorer = Explorer(stock, 1, 200, workers=workers)

        def explore() -> None:
            for _ in range(EPOCHS):
                explorer.step()

        benchmark.pedantic(explore, rounds=1)
    print(f"\n{benchmark.name}: front of {len(explorer.archive)}, {explorer.computed:,} stacks judged")  # noqa: T201

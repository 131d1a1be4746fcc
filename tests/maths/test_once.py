"""What is kept with an object, and what is let go."""

from __future__ import annotations

import pytest

from clingstone.maths import once


class Table:
    def __init__(self, n: int, made: list[int]) -> None:
        self.n, self.made = n, made

    @once.lately
    def wide(self, k: int) -> int:
        self.made.append(k)
        return 10 * k


@pytest.mark.parametrize(("n", "made"), [(10, [1, 2]), (once.FEW_ROWS + 1, [1, 2, 1])])
def test_of_a_long_table_only_the_latest_value_is_kept(n: int, made: list[int]) -> None:
    table = Table(n, [])
    assert [table.wide(k) for k in (1, 1, 2, 2, 1)] == [10, 10, 20, 20, 10]
    assert table.made == made

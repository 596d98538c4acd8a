"""Position on a plate: median polish, contrasts within blocks, permutation, drift along the read order."""

from __future__ import annotations

import numpy as np
import pytest
from hypothesis import given, settings
from hypothesis import strategies as st
from hypothesis.extra.numpy import arrays

from models.statistics.position import (
    median_polish,
    permutation_test,
    position_effects,
    read_order_drift,
    set_contrasts,
)

ROWS, COLUMNS = 8, 12
ROW, COLUMN = (each.ravel() for each in np.meshgrid(np.arange(1, 9), np.arange(1, 13), indexing="ij"))
TRIPLICATES = (ROW - 1) * 4 + (COLUMN - 1) // 3
EDGE = (ROW == 1) | (ROW == ROWS) | (COLUMN == 1) | (COLUMN == COLUMNS)
COLUMN_SETS = np.arange(1, 13)[:, None] == COLUMN


def tables(count: int) -> st.SearchStrategy[np.ndarray]:
    values = st.one_of(st.integers(-50, 50).map(float), st.just(np.nan))
    return arrays(float, (count, 4, 5), elements=values)


@settings(max_examples=40)
@given(tables(3))
def test_polish_takes_a_table_apart_and_leaves_medians_of_zero(given_tables: np.ndarray) -> None:
    found = median_polish(given_tables)
    row, column = np.nan_to_num(found.row), np.nan_to_num(found.column)
    rebuilt = found.overall[:, None, None] + row[:, :, None] + column[:, None, :] + found.residual
    np.testing.assert_allclose(rebuilt, given_tables, atol=1e-9)
    # The defining property, after the step that comes last: no column has a median left.
    for table in found.residual:
        for values in table.T:
            known = values[np.isfinite(values)]
            assert known.size == 0 or abs(np.median(known)) < 1e-9


def test_additive_tables_leave_nothing_even_with_odd_wells() -> None:
    row, column = np.arange(5.0), np.array([0.0, 10.0, -3.0, 4.0, 1.0, 2.0, 0.5])
    table = 7 + row[:, None] + column[None, :]
    odd = table.copy()
    odd[2, 3] += 100
    found = median_polish(np.stack([table, odd]))
    np.testing.assert_allclose(found.residual[0], 0, atol=1e-12)
    np.testing.assert_allclose(found.residual[1], odd - table, atol=1e-12)
    np.testing.assert_allclose(np.diff(found.row), 1.0)


@settings(max_examples=40)
@given(tables(4))
def test_a_table_is_polished_alike_in_any_batch(given_tables: np.ndarray) -> None:
    together = median_polish(given_tables)
    for number, table in enumerate(given_tables):
        alone = median_polish(table[None])
        np.testing.assert_array_equal(alone.row[0], together.row[number])
        np.testing.assert_array_equal(alone.column[0], together.column[number])


def test_row_column_and_edge_effects_are_found_where_they_are() -> None:
    plate = np.repeat([0, 1, 2], 96)
    noise = 0.01 * np.random.default_rng(1).standard_normal((3, 96))
    values = noise + np.stack([0.1 * (ROW == 3), -0.1 * (COLUMN == 7), 0.1 * EDGE])
    found = position_effects(plate, np.tile(ROW, 3), np.tile(COLUMN, 3), np.tile(EDGE, 3), values.ravel(), 3)
    assert found.row[0, 2] == pytest.approx(0.1, abs=0.02)
    assert np.abs(np.delete(found.row[0], 2)).max() < 0.02
    assert found.column[1, 6] == pytest.approx(-0.1, abs=0.02)
    assert found.edge == pytest.approx([0.0, 0.0, 0.1], abs=0.02)


def test_a_row_of_two_wells_has_no_effect() -> None:
    found = position_effects(
        np.zeros(5, dtype=int),
        np.array([1, 1, 1, 2, 2]),
        np.array([1, 2, 3, 1, 2]),
        np.array([True, True, True, False, False]),
        np.array([1.0, 1.1, 1.2, 3.0, 3.0]),
        1,
    )
    assert np.isfinite(found.row[0, 0])
    assert np.isnan(found.row[0, 1])
    assert np.isnan(found.edge[0])


def test_contrasts_are_not_diluted_by_the_blocks_own_mean_nor_moved_by_what_blocks_share() -> None:
    of_block = np.random.default_rng(4).standard_normal(32)[TRIPLICATES]
    effect, telling = set_contrasts(TRIPLICATES, COLUMN_SETS, of_block + 0.1 * (COLUMN == 5))
    assert effect[4] == pytest.approx(0.1)
    assert effect[[3, 5]] == pytest.approx([-0.05, -0.05])
    assert effect[[0, 1, 2, 6, 7, 8]] == pytest.approx(np.zeros(6), abs=1e-12)
    assert telling.tolist() == [8] * 12
    rows, none = set_contrasts(TRIPLICATES, np.arange(1, 9)[:, None] == ROW, of_block)
    assert np.isnan(rows).all()
    assert none.tolist() == [0] * 8


def test_chance_exceeds_the_limit_as_often_as_said() -> None:
    rng = np.random.default_rng(17)
    smallest = [
        np.nanmin(permutation_test(TRIPLICATES, COLUMN_SETS * 1.0, rng.standard_normal(96))[1])
        for _ in range(600)
    ]
    # 4 standard errors of a share of 600 plates.
    for level in (0.01, 0.05, 0.2):
        assert np.mean(np.array(smallest) <= level) < level + 4 * np.sqrt(level / 600)
    assert np.mean(np.array(smallest) <= 0.2) > 0.1


def test_blocks_of_different_size_keep_to_the_level() -> None:
    block = np.concatenate([np.repeat(np.arange(40), 2), np.full(16, 40)])
    first = np.arange(96) % 2 == 0
    sets = np.stack([first & (block < 40), first & (block == 40)]) * 1.0
    rng = np.random.default_rng(19)
    found = [permutation_test(block, each[None], rng.standard_normal(96))[1][0] for each in [*sets] * 600]
    share = np.mean(np.array(found).reshape(-1, 2) <= 0.1, axis=0)
    # 4 standard errors of a share of 600 plates.
    assert share == pytest.approx([0.1, 0.1], abs=4 * np.sqrt(0.1 * 0.9 / 600))


def test_an_effect_stands_out_and_its_p_value_does_not_depend_on_what_blocks_share() -> None:
    rng = np.random.default_rng(2)
    scores = rng.standard_normal(96) + 3.5 * (COLUMN == 5)
    statistic, p_value = permutation_test(TRIPLICATES, COLUMN_SETS * 1.0, scores)
    assert int(np.argmax(np.abs(statistic))) == 4
    assert p_value[4] == pytest.approx(0.001)
    moved = permutation_test(
        TRIPLICATES, COLUMN_SETS * 1.0, scores + 10 * rng.standard_normal(32)[TRIPLICATES]
    )
    np.testing.assert_allclose(moved[0], statistic, rtol=1e-9)
    np.testing.assert_array_equal(moved[1], p_value)


@pytest.mark.parametrize("scores", [np.zeros(96), np.arange(96.0)])
def test_what_permutation_cannot_change_has_no_p_value(scores: np.ndarray) -> None:
    whole_blocks = (TRIPLICATES == 3)[None] * 1.0
    statistic, p_value = permutation_test(TRIPLICATES, whole_blocks, scores)
    assert np.isnan(statistic).all()
    assert np.isnan(p_value).all()
    alone, _ = permutation_test(np.arange(96), COLUMN_SETS * 1.0, scores)
    assert np.isnan(alone).all()


def test_drift_along_the_read_order() -> None:
    rng = np.random.default_rng(6)
    order = np.arange(96.0)
    values = 0.1 * order / 95 + 0.02 * rng.standard_normal(96)
    values[::17] += 1.0
    found = read_order_drift(order, values)
    assert found is not None
    assert found.change == pytest.approx(0.1, abs=0.02)
    assert found.p_value < 1e-6
    clean = read_order_drift(order, np.append(rng.standard_normal(95), np.nan))
    assert clean is not None
    assert clean.p_value > 0.01
    assert read_order_drift(np.arange(3.0), np.arange(3.0)) is None
    assert read_order_drift(np.zeros(9), np.arange(9.0)) is None

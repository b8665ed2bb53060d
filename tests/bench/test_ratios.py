"""The statistics of the benchmarks on known times; nothing is measured here."""

import numpy as np
import pytest

from tests.bench.operations import Counted, count, counting_math
from tests.bench.ratios import Comparison, Side, compare, fitting_repeats, interleave
from tests.bench.table import Finding, as_json, as_text, faster, rate_text, time_text
from tests.sources import source

ROUNDING = 1e-12  # of a logarithm, an exponential and a division


def test_ratio_is_the_median_over_rounds() -> None:
    """Each round gives one ratio; one wild round changes nothing."""
    base = np.array([1.0, 2.0, 1.0, 2.0, 1.0])
    other = base * np.array([3.0, 3.0, 900.0, 2.0, 4.0])
    assert compare(base, other).ratio == 3.0
    assert compare(base, other).count == 5


@source("numpy", "quantile, method linear")
def test_spread_is_that_of_each_side_against_itself() -> None:
    """Steps of a factor 2, 1, 1, 1 and 1, 1, 1, 1: by hand, the 0.9 quantile of eight values lies 0.3 of the way to ln 2."""
    base = np.array([1.0, 2.0, 2.0, 2.0, 2.0])
    other = np.full(5, 7.0)
    assert compare(base, other).spread == pytest.approx(2.0**0.3 - 1.0, rel=ROUNDING)


def test_quiet_sides_tell() -> None:
    """Without spread any effect is told."""
    assert compare(np.full(5, 100.0), np.full(5, 101.0)).tells


def test_cannot_tell_within_the_spread() -> None:
    """Sides that change by a factor 2 from block to block say nothing about an effect of 1.5, whichever side is the slower."""
    restless = np.array([1.0, 2.0, 1.0, 2.0, 1.0, 2.0])
    found = compare(restless, 1.5 * restless)
    assert found.spread == pytest.approx(1.0, rel=ROUNDING)
    assert not found.tells
    assert not compare(1.5 * restless, restless).tells
    assert compare(restless, 2.5 * restless).tells
    assert compare(2.5 * restless, restless).tells


def test_drift_common_to_both_sides_cancels() -> None:
    """A machine that gets slower slows both sides: the ratio stays."""
    drift = np.linspace(1.0, 3.0, 101)
    found = compare(10.0 * drift, 25.0 * drift)
    assert found.ratio == pytest.approx(2.5, rel=ROUNDING)
    assert found.tells


@pytest.mark.parametrize(
    ("base", "other"),
    [
        ([1.0] * 4, [1.0] * 4),
        ([1.0] * 5, [1.0] * 6),
        ([1.0] * 5, [1.0] * 4 + [0.0]),
        ([-1.0] + [1.0] * 4, [1.0] * 5),
        ([1.0] * 5, [1.0] * 4 + [float("nan")]),
        ([float("inf")] + [1.0] * 4, [1.0] * 5),
    ],
)
def test_refuses_what_is_no_comparison(base: list[float], other: list[float]) -> None:
    """Fewer than five rounds, unequal rounds, and times that are none are refused."""
    with pytest.raises(ValueError):
        compare(np.array(base), np.array(other))


def test_sides_take_turns() -> None:
    """A B A B: after the repeats are found, blocks alternate, all of a side's with the same number of repeats."""
    calls: list[tuple[str, int]] = []
    sides = {name: Side(lambda repeats, name=name: calls.append((name, repeats)), calls=4) for name in ("a", "b")}
    times = interleave(sides, rounds=5, block_s=1e-6)
    turns = calls[-10:]
    assert [name for name, _ in turns] == ["a", "b"] * 5
    assert len({repeats for name, repeats in turns if name == "a"}) == 1
    assert {name: len(series) for name, series in times.items()} == {"a": 5, "b": 5}


def test_repeats_grow_with_the_block() -> None:
    """A longer block takes more repeats of the same work."""
    side = Side(lambda repeats: sum(range(1000 * repeats)))
    assert fitting_repeats(side, 2e-2) > fitting_repeats(side, 2e-5)


def test_json_is_ratios_only() -> None:
    """Ratios, their spreads, and the names of what cannot be told; lines for people only are left out."""
    quiet, restless = Comparison(2.0, 0.1, 5), Comparison(1.5, 0.9, 5)
    found = [
        Finding("clear_ratio", "clear", "1 ns", comparison=quiet),
        Finding("unclear_ratio", "unclear", "1 ns", comparison=restless),
        Finding("", "remark", "1 ns"),
    ]
    assert as_json(found) == {
        "clear_ratio": 2.0,
        "clear_ratio_spread": 0.1,
        "unclear_ratio": 1.5,
        "unclear_ratio_spread": 0.9,
        "cannot_tell": ["unclear_ratio"],
    }


def test_table_says_cannot_tell() -> None:
    """The text shows the ratio of what is clear and says so where it is not."""
    steady = faster("a_ratio", "steady", np.full(5, 100.0), np.full(5, 250.0), "> 1.5")
    restless = faster("b_ratio", "restless", np.array([1.0, 2.0] * 3), np.array([1.5, 3.0] * 3))
    assert as_text("title", [steady, restless]).splitlines() == [
        "title",
        "               ours   other               ratio  A to A    aim",
        "   steady    100 ns  250 ns                2.50     0 %  > 1.5",
        "   restless    2 ns    2 ns  cannot tell (1.50)   100 %",
    ]


def test_times_and_rates_as_text() -> None:
    """The unit follows the size."""
    assert [time_text(x) for x in (12.4, 1234.0, 2.5e6)] == ["12 ns", "1.23 us", "2.5 ms"]
    assert rate_text(51234.0) == "51,200/s"


def test_counted_numbers_count() -> None:
    """(a b + 1) / 2 - a cos(a) - (-a) takes six operations, the sign apart, and one cosine."""
    count.update(arithmetic=0, sines_cosines=0)
    a, b = Counted(3.0), Counted(4.0)
    result = (a * b + 1.0) / 2.0 - a * counting_math().cos(a) - (-a)
    assert count == {"arithmetic": 6, "sines_cosines": 1}
    assert float(result) == pytest.approx(6.5 - 3.0 * np.cos(3.0) + 3.0, rel=ROUNDING)

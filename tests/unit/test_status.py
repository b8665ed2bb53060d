"""What a running controller says about itself."""

import numpy as np
import pytest

from rtctl.blocks import BIT_ESTOP
from rtctl.kernels.layout import new_block
from rtctl.loop.blocks import BINS, LOOP
from rtctl.loop.status import explain, percentile_us, status_of, why_no_start
from tests.sources import source
from tests.stand import Stand


@source("numpy", "numpy.percentile, method inverted_cdf")
def test_percentiles_of_the_histogram_are_those_of_the_samples() -> None:
    """To the width of a bin, 1 us."""
    samples = np.random.default_rng(4).gamma(2.0, 20.0, 5000)
    bins = np.bincount(np.minimum(samples.astype(int), BINS - 1), minlength=BINS)
    for percent in (50.0, 99.0):
        exact = float(np.percentile(samples, percent, method="inverted_cdf"))
        assert percentile_us(bins, percent) == pytest.approx(exact, abs=1.0)
    assert percentile_us(np.zeros(BINS), 99.0) == 0.0


def test_a_refused_start_says_why() -> None:
    """In off: each condition with its next step; latched: the first cause; otherwise the mode."""
    stand = Stand()
    stand.step()
    text = " ".join(why_no_start(stand.row))
    assert "The driver no longer grants this controller the right to command torque." in text
    stand.to_live()
    assert why_no_start(stand.row) == ["The controller is in live."]
    stand.step(BIT_ESTOP)
    for _ in range(30):
        stand.step()
    assert why_no_start(stand.row) == ["Latched: An e-stop was asked for. Find the cause, then reset."]


def test_off_without_a_condition_names_what_is_left() -> None:
    """A holding torque that does not fit shows in no watch, but in this sentence."""
    stand = Stand()
    stand.setup["limits"]["hold_margin"] = 0.01
    for _ in range(40):
        stand.step()
    assert why_no_start(stand.row) == [
        "The checks have not held long enough, the arm is not still, or the holding torque does not fit the limits."
    ]


def test_the_cause_is_explained_from_the_table() -> None:
    """Sentence, likely reasons and next step come with the code."""
    stand = Stand().to_live()
    stand.driver.qd = [9.0, 0.0]
    stand.step()
    why = explain(stand.row)
    assert (why["cause"], why["sentence"]) == ("speed", "A joint was faster than its speed limit.")
    assert why["likely"][0] == "the reference is too fast"
    assert why["conditions"] == ["speed"]


def test_the_status_is_plain_and_complete() -> None:
    """Mode, margins by name, driver bits and timing, all plain values."""
    stand = Stand().to_live()
    status = status_of(stand.row, new_block(LOOP))
    assert status["mode"] == "live"
    assert status["cause"] == "none"
    assert status["driver"]["simulated"] is True
    assert status["driver"]["brake_closed"] is False
    assert set(status["margins"]) >= {"speed", "position", "state_age"}
    assert status["timing"]["cycle_count"] == 0

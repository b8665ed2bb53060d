"""Anti-windup of integral terms."""

import numpy as np
import pytest

from tests.law_stand import LawStand, PlanarArm
from tests.sources import source


def memory_after(law: str, error: float, excess: float, start: float = 0.0) -> float:
    """Integral term of joint 1 after one call with this error and this much torque cut off in the last cycle."""
    stand = LawStand(law, PlanarArm().model()).set(q_ref=[error, 0.0], tau_law_last=[5.0 + excess, 0.0], tau_out_last=[5.0, 0.0])
    stand.memory["values"][0] = start
    stand.call()
    return float(stand.memory["values"][0])


@source("astrom-hagglund1995", "conditional integration")
@pytest.mark.parametrize("law", ["pid", "computed_torque"])
def test_integral_does_not_grow_into_saturation(law: str) -> None:
    """With torque cut, an error of the same sign is not integrated and one of the other sign is."""
    assert memory_after(law, error=0.1, excess=2.0) == 0.0
    assert memory_after(law, error=-0.1, excess=-2.0) == 0.0
    assert memory_after(law, error=-0.1, excess=2.0) < 0.0
    assert memory_after(law, error=0.1, excess=-2.0) > 0.0
    assert memory_after(law, error=0.1, excess=0.0) > 0.0


def test_rounding_in_the_limiters_is_not_saturation() -> None:
    """A difference in the last bits of the torque does not stop the integral."""
    assert memory_after("pid", error=0.1, excess=5e-15) > 0.0


def test_recovery_from_saturation_is_immediate() -> None:
    """After a thousand cycles in saturation the term is where it was, so the torque turns with the error at once."""
    stand = LawStand("pid", PlanarArm().model()).set(q_ref=[1.0, 1.0], tau_law_last=30.0, tau_out_last=20.0)
    for _ in range(1000):
        stand.call()
    assert not stand.memory["values"][:2].any()


@pytest.mark.parametrize("bad", [np.nan, np.inf, -np.inf])
@pytest.mark.parametrize("field", ["q", "q_ref", "tau_law_last", "tau_out_last"])
def test_numbers_that_are_not_finite_stay_out_of_the_memory(field: str, bad: float) -> None:
    """One bad measurement passes through the torque of its cycle, where the gate sees it, and leaves a finite, bounded memory."""
    stand = LawStand("pid", PlanarArm().model()).set(q_ref=[0.1, 0.1])
    stand.set(**{field: bad})
    stand.call()
    assert np.all(np.abs(stand.memory["values"][:2]) <= 4.0)
    stand.set(q=0.0, q_ref=0.1, tau_law_last=0.0, tau_out_last=0.0).call()
    assert np.all(np.isfinite(stand.memory["values"]))

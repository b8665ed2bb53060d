"""Feedforward with PD: both parts side by side, to the last bit."""

import numpy as np

from tests.law_stand import LawStand, PlanarArm

MOTION = {"q": [0.4, -0.8], "qd": [0.9, -1.7], "q_ref": [0.5, -1.0], "qd_ref": [1.0, -2.0], "qdd_ref": [3.0, 4.0]}


def test_terms_are_those_of_its_two_parts() -> None:
    """Its first four terms are those of feedforward, its last two those of PD with the same gains."""
    model = PlanarArm().model()
    both, model_part, pd = (LawStand(name, model).set(**MOTION) for name in ("feedforward_pd", "feedforward", "pd"))
    for stand in (both, model_part, pd):
        stand.call()
    for name in ("gravity", "velocity", "inertia", "friction"):
        assert np.array_equal(both.term(name), model_part.term(name)), name
    for name in ("p", "d"):
        assert np.array_equal(both.term(name), pd.term(name)), name

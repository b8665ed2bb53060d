"""Small true arms for tests, filled by hand from closed-form data, and a controller's side of the messages."""

from typing import Any

import numpy as np

from rtctl.blocks import REQUEST_ASK, STATE, TORQUE, WIRE_VERSION
from rtctl.kernels.layout import MODEL, PRISMATIC, REVOLUTE, new_block
from rtctl.plant.blocks import PLANT_MEMORY, PLANT_SETUP, REST_BRAKE
from rtctl.plant.driver_duty import plant_advance, plant_receive, plant_state

GRAVITY = 9.80665  # m/s^2, standard gravity (3rd CGPM 1901)
MS = 1_000_000  # ns
KEY, DRIVER, FIRST, SECOND = 77, 4242, 1001, 2002


def chain_model(n: int, length_m: float = 0.4, mass_kg: float = 2.0, gravity: float = GRAVITY) -> np.void:
    """`n` equal uniform rods in a vertical plane, axes level; all joints at 0: the arm hangs straight down.

    Body frames have z along the joint axis and x along the rod; gravity points along base x.
    """
    model = new_block(MODEL)
    model["n"] = n
    model["gravity"] = (gravity, 0.0, 0.0)
    model["friction_speed"] = 0.01
    for i in range(n):
        model["parent"][i] = i - 1
        model["kind"][i] = REVOLUTE
        model["R_parent"][i] = np.eye(3)
        model["p_parent"][i] = (length_m if i else 0.0, 0.0, 0.0)
        model["mass"][i] = mass_kg
        model["h"][i] = (mass_kg * length_m / 2, 0.0, 0.0)
        about_end = mass_kg * length_m**2 / 3
        model["I"][i] = (0.0, 0.0, 0.0, about_end, 0.0, about_end)
    return model


def oblique_model(n: int, gravity: float = GRAVITY) -> np.void:
    """`n` rods whose axes turn by 90 degrees from joint to joint, with rotor inertia: every kind of coupling occurs."""
    model = chain_model(n, length_m=0.25, gravity=gravity)
    turn = np.array([[1.0, 0.0, 0.0], [0.0, 0.0, -1.0], [0.0, 1.0, 0.0]])
    for i in range(n):
        model["mass"][i] = 3.0 - 0.3 * i
        model["h"][i] = model["mass"][i] * np.array([0.12, 0.02, -0.01])
        c = model["h"][i] / model["mass"][i]
        inertia = 0.02 * np.eye(3) + model["mass"][i] * (c @ c * np.eye(3) - np.outer(c, c))
        model["I"][i] = inertia[np.triu_indices(3)]
        model["rotor"][i] = 0.05
        if i:
            model["R_parent"][i] = turn
    return model


def slider_model(mass_kg: float) -> np.void:
    """One level prismatic joint."""
    model = new_block(MODEL)
    model["n"] = 1
    model["parent"][0] = -1
    model["kind"][0] = PRISMATIC
    model["R_parent"][0] = np.eye(3)
    model["mass"][0] = mass_kg
    model["gravity"] = (GRAVITY, 0.0, 0.0)
    return model


def true_arm(model: np.void, **values: Any) -> tuple[np.void, np.void]:
    """Setup and zeroed memory of an arm without friction, stops, lag, delay or quantisation; `values` change the setup."""
    setup = new_block(PLANT_SETUP)
    for name in MODEL.names:
        setup["model"][name] = model[name]
    setup["arm_key"], setup["session"] = KEY, DRIVER
    setup["period_ns"], setup["substeps"] = MS, 10
    setup["tau_max"] = 100.0
    setup["qd_max"] = np.inf
    setup["valid_for_max_ns"] = 20 * MS
    setup["silent_max_ns"] = 100 * MS
    setup["still_qd"] = 0.02
    setup["still_dwell_ns"] = 10 * MS
    setup["rest_damping"] = 5.0
    setup["rest_moving_ns"] = 300 * MS
    setup["rest_still"] = REST_BRAKE
    setup["tau_measured"] = 1
    setup["q_min"], setup["q_max"] = -np.inf, np.inf
    setup["stiction_ratio"] = 1.0
    setup["brake_torque"] = 200.0
    setup["brake_open_ns"], setup["brake_close_ns"] = 5 * MS, 8 * MS
    for name, value in values.items():
        if isinstance(value, list | tuple):
            setup[name][: len(value)] = value
        else:
            setup[name] = value
    return setup, new_block(PLANT_MEMORY)


class Controller:
    """The controller's side in lock-step: what it last saw, and messages that answer it."""

    def __init__(self, setup: np.void, memory: np.void, session: int = FIRST) -> None:
        self.setup, self.memory, self.session = setup, memory, session
        self.sequence = 0
        self.now_ns = int(memory["time_ns"])
        self.state = new_block(STATE)

    def message(self, request: int = REQUEST_ASK, tau: tuple[float, ...] | None = None, **values: int) -> np.void:
        """A correct message that answers the state last seen; `values` change fields."""
        torque = new_block(TORQUE)
        self.sequence += 1
        torque["version"], torque["arm_key"] = WIRE_VERSION, KEY
        torque["session"], torque["sequence"] = self.session, self.sequence
        torque["driver_session"], torque["state_sequence"] = self.state["session"], self.state["sequence"]
        torque["grant"], torque["request"] = self.state["grant"], request
        torque["valid_for_ns"], torque["n"] = 5 * MS, self.setup["model"]["n"]
        if tau is not None:
            torque["tau"][: len(tau)] = tau
        for name, value in values.items():
            torque[name] = value
        return torque

    def send(self, request: int = REQUEST_ASK, tau: tuple[float, ...] | None = None, **values: int) -> int:
        """Send a message now; returns what the driver says."""
        return int(plant_receive(self.setup, self.memory, self.message(request, tau, **values), self.now_ns))

    def step(self, steps: int = 1) -> np.void:
        """Let time pass by whole periods and read the newest state."""
        for _ in range(steps):
            self.now_ns += int(self.setup["period_ns"])
            assert plant_advance(self.setup, self.memory, self.now_ns) == 1
        plant_state(self.setup, self.memory, self.now_ns, self.state)
        return self.state

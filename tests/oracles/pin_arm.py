"""A model block as a model of the rigid-body library `pin`, built from the same numbers."""

from typing import Any

import numpy as np
import pinocchio as pin
from numpy.typing import NDArray

from rtctl.kernels.layout import REVOLUTE

Array = NDArray[np.float64]


def symmetric(six: Array) -> Array:
    """The 3 x 3 tensor of xx xy xz yy yz zz."""
    xx, xy, xz, yy, yz, zz = six
    return np.array([[xx, xy, xz], [xy, yy, yz], [xz, yz, zz]])


def depth_first(parents: list[int]) -> list[int]:
    """Bodies in the order the library wants them: each followed by everything it carries."""
    order: list[int] = []

    def visit(body: int) -> None:
        order.append(body)
        for child, parent in enumerate(parents):
            if parent == body:
                visit(child)

    for body, parent in enumerate(parents):
        if parent < 0:
            visit(body)
    return order


class PinArm:
    """The library's model, with the arguments and results of each call in the order of our joints."""

    def __init__(self, model: np.void) -> None:
        self.model = pin.Model()
        n = int(model["n"])
        self.order = depth_first([int(k) for k in model["parent"][:n]])
        joint = {-1: 0}
        for i in self.order:
            kind = pin.JointModelRZ() if model["kind"][i] == REVOLUTE else pin.JointModelPZ()
            placement = pin.SE3(model["R_parent"][i], model["p_parent"][i])
            joint[i] = self.model.addJoint(joint[int(model["parent"][i])], kind, placement, f"joint {i}")
            mass = float(model["mass"][i])
            centre = model["h"][i] / mass
            I_centre = symmetric(model["I"][i]) - mass * (centre @ centre * np.eye(3) - np.outer(centre, centre))
            self.model.appendBodyToJoint(joint[i], pin.Inertia(mass, centre, I_centre), pin.SE3.Identity())
        self.model.armature = np.array(model["rotor"][self.order])
        self.model.gravity.linear = np.array(model["gravity"])
        self.frame_ids = []
        for k in range(int(model["frame_count"])):
            placement = pin.SE3(model["R_body_frame"][k], model["p_body_frame"][k])
            frame = pin.Frame(f"frame {k}", joint[int(model["frame_body"][k])], placement, pin.FrameType.OP_FRAME)
            self.frame_ids.append(self.model.addFrame(frame, False))
        self.data = self.model.createData()

    def to_pin(self, x: Array) -> Array:
        """Joint values in the library's order."""
        return np.array(x)[self.order]

    def to_ours(self, x: Array) -> Array:
        """Joint values in the model block's order."""
        out = np.empty_like(x)
        out[self.order] = x
        return out

    def inverse_dynamics(self, q: Array, qd: Array, qdd: Array) -> Array:
        return self.to_ours(pin.rnea(self.model, self.data, self.to_pin(q), self.to_pin(qd), self.to_pin(qdd)))

    def bias_torque(self, q: Array, qd: Array) -> Array:
        return self.to_ours(pin.nonLinearEffects(self.model, self.data, self.to_pin(q), self.to_pin(qd)))

    def gravity_torque(self, q: Array) -> Array:
        return self.to_ours(pin.computeGeneralizedGravity(self.model, self.data, self.to_pin(q)))

    def forward_dynamics(self, q: Array, qd: Array, tau: Array) -> Array:
        return self.to_ours(pin.aba(self.model, self.data, self.to_pin(q), self.to_pin(qd), self.to_pin(tau)))

    def inertia_matrix(self, q: Array) -> Array:
        upper = np.triu(pin.crba(self.model, self.data, self.to_pin(q)))
        full = upper + np.triu(upper, 1).T
        out = np.empty_like(full)
        out[np.ix_(self.order, self.order)] = full
        return out

    def frame_pose(self, frame: int, q: Array) -> Array:
        pin.framesForwardKinematics(self.model, self.data, self.to_pin(q))
        return np.array(self.data.oMf[self.frame_ids[frame]].homogeneous)

    def _columns(self, J: Array) -> Array:
        out = np.empty((6, len(self.order)))
        out[:, self.order] = J.reshape(6, -1)  # the binding drops the second axis of one-joint arms
        return out

    def jacobian(self, frame: int, q: Array) -> Array:
        where: Any = pin.ReferenceFrame.LOCAL_WORLD_ALIGNED
        return self._columns(pin.computeFrameJacobian(self.model, self.data, self.to_pin(q), self.frame_ids[frame], where))

    def jacobian_rate(self, frame: int, q: Array, qd: Array) -> Array:
        where: Any = pin.ReferenceFrame.LOCAL_WORLD_ALIGNED
        pin.computeJointJacobiansTimeVariation(self.model, self.data, self.to_pin(q), self.to_pin(qd))
        pin.updateFramePlacements(self.model, self.data)
        return self._columns(pin.getFrameJacobianTimeVariation(self.model, self.data, self.frame_ids[frame], where))

    def energy(self, q: Array, qd: Array) -> tuple[float, float]:
        kinetic = pin.computeKineticEnergy(self.model, self.data, self.to_pin(q), self.to_pin(qd))
        return float(kinetic), float(pin.computePotentialEnergy(self.model, self.data, self.to_pin(q)))

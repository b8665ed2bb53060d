"""The explicit equations of a measured six-joint arm (source arm6_1986): published constants, how they follow from the link data,
inertia matrix, velocity coefficients and gravity vector. Written from memory of the paper; no recursion, no code of the project.

Two published constants, I1 and I3, do not follow from the link data (1.43 against 1.553 and 1.38 against 1.602 kg m^2), so a test
uses either the published set or the derived one, never a mixture.
"""

import math
from collections.abc import Sequence

import numpy as np
from numpy.typing import NDArray

Array = NDArray[np.float64]
Constants = dict[str, float]

IM = (1.14, 4.71, 0.827, 0.200, 0.179, 0.193)  # kg m^2, motor and drive at the joint

# By name, as printed: "name value" pairs; the tolerances stand beside the constants in the paper.
_PUBLISHED = """
I1 1.43 I2 1.75 I3 1.38 I4 0.690 I5 0.372 I6 0.333 I7 0.298 I8 -0.134 I9 0.0238 I10 -0.0213 I11 -0.0142 I12 -0.0110
I13 -3.79e-3 I14 1.64e-3 I15 1.25e-3 I16 1.24e-3 I17 6.42e-4 I18 4.31e-4 I19 3.00e-4 I20 -2.02e-4 I21 -1.00e-4 I22 -5.80e-5
I23 4.00e-5 g1 -37.2 g2 -8.44 g3 1.02 g4 0.249 g5 -0.0282
"""
_TOLERANCES = """
I2 0.07 I4 0.020 I5 0.031 I6 0.016 I7 0.029 I8 0.014 I9 0.0120 I10 0.0022 I11 0.0070 I12 0.0011 I13 0.90e-3 I14 0.07e-3
I15 0.30e-3 I16 0.30e-3 I17 3.00e-4 I18 1.30e-4 I19 14.0e-4 I20 8.00e-4 I21 6.00e-4 I22 1.50e-5 I23 2.00e-5
g1 0.5 g2 0.20 g3 0.50 g4 0.025 g5 0.0056
"""


def _pairs(text: str) -> Constants:
    words = text.split()
    return {name: float(value) for name, value in zip(words[::2], words[1::2], strict=True)}


PUBLISHED, TOLERANCES = _pairs(_PUBLISHED), _pairs(_TOLERANCES)


def derived_constants(g: float) -> Constants:
    """The constants from the link data of tables 4 to 6, kg m^2 and N m; g in m/s^2."""
    a2, a3, d2, d3, d4 = 0.4318, -0.0203, 0.2435, -0.0934, 0.4331
    m2, m3, m4, m5, m6 = 17.40, 4.80, 0.82, 0.34, 0.09
    rx2, ry2, rz2, ry3, rz3, rz4, rz6 = 0.068, 0.006, -0.016, -0.070, 0.014, -0.019, 0.032
    Izz1 = 0.35
    (Ixx2, Iyy2, Izz2), (Ixx3, Iyy3, Izz3) = (0.130, 0.524, 0.539), (0.066, 0.0125, 0.086)
    (Ixx4, Iyy4, Izz4), (Ixx5, Iyy5, Izz5) = (1.8e-3, 1.8e-3, 1.3e-3), (0.30e-3, 0.30e-3, 0.40e-3)
    Ixx6, Izz6 = 0.15e-3, 0.04e-3
    w = m4 + m5 + m6
    W = m3 + w
    D = d2 + d3
    k: Constants = {}
    k["I1"] = Izz1 + m2 * d2**2 + w * a3**2 + m2 * rz2**2 + W * D**2 + Ixx2 + Iyy3 + 2 * m2 * d2 * rz2 + m2 * ry2**2 + m3 * rz3**2
    k["I1"] += 2 * m3 * D * rz3 + Izz4 + Iyy5 + Izz6
    k["I2"] = Izz2 + m2 * (rx2**2 + ry2**2) + W * a2**2
    k["I3"] = -Ixx2 + Iyy2 + W * a2**2 + m2 * rx2**2 - m2 * ry2**2
    k["I4"] = m2 * rx2 * (d2 + rz2) + m3 * a2 * rz3 + W * a2 * D
    k["I5"] = -m3 * a2 * ry3 + w * a2 * d4 + m4 * a2 * rz4
    k["I6"] = Izz3 + m3 * ry3**2 + m4 * a3**2 + m4 * (d4 + rz4) ** 2 + Iyy4 + m5 * (a3**2 + d4**2) + Izz5
    k["I6"] += m6 * (a3**2 + d4**2) + m6 * rz6**2 + Ixx6
    k["I7"] = m3 * ry3**2 + Ixx3 - Iyy3 + m4 * rz4**2 + 2 * m4 * d4 * rz4 + w * (d4**2 - a3**2) + Iyy4 - Izz4 + Izz5 - Iyy5
    k["I7"] += m6 * rz6**2 - Izz6 + Ixx6
    k["I8"] = -m4 * D * (d4 + rz4) - (m5 + m6) * D * d4 + m3 * ry3 * rz3 + m3 * D * ry3
    k["I9"] = m2 * ry2 * (d2 + rz2)
    k["I10"] = 2 * m4 * a3 * rz4 + 2 * w * a3 * d4
    k["I11"] = -2 * m2 * rx2 * ry2
    k["I12"] = w * a2 * a3
    k["I13"] = w * a3 * D
    k["I14"] = Izz4 + Iyy5 + Izz6
    k["I15"] = m6 * d4 * rz6
    k["I16"] = m6 * a2 * rz6
    k["I17"] = Izz5 + Ixx6 + m6 * rz6**2
    k["I18"] = m6 * D * rz6
    k["I19"] = Iyy4 - Ixx4 + Izz5 - Iyy5 + m6 * rz6**2 + Ixx6 - Izz6
    k["I20"] = Iyy5 - Ixx5 - m6 * rz6**2 + Izz6 - Ixx6
    k["I21"] = Ixx4 - Iyy4 + Ixx5 - Izz5
    k["I22"] = m6 * a3 * rz6
    k["I23"] = Izz6
    k["g1"] = -g * (W * a2 + m2 * rx2)
    k["g2"] = g * (m3 * ry3 - w * d4 - m4 * rz4)
    k["g3"] = g * m2 * ry2
    k["g4"] = -g * w * a3
    k["g5"] = -g * m6 * rz6
    return k


class Pose:
    """Sines and cosines of a pose with the abbreviations of the paper: SS = sin^2, CC = cos^2, SC = sin cos, 223 = 2 q2 + q3."""

    def __init__(self, q: Sequence[float]) -> None:
        _, q2, q3, q4, q5, _ = q
        self.S2, self.C2 = math.sin(q2), math.cos(q2)
        self.S3, self.C3 = math.sin(q3), math.cos(q3)
        self.S23, self.C23 = math.sin(q2 + q3), math.cos(q2 + q3)
        self.S223, self.C223 = math.sin(2 * q2 + q3), math.cos(2 * q2 + q3)
        self.S4, self.C4 = math.sin(q4), math.cos(q4)
        self.S5, self.C5 = math.sin(q5), math.cos(q5)
        self.SS2, self.CC2, self.SC2 = self.S2**2, self.C2**2, self.S2 * self.C2
        self.SS23, self.CC23, self.SC23 = self.S23**2, self.C23**2, self.S23 * self.C23
        self.SS4, self.CC4, self.SC4 = self.S4**2, self.C4**2, self.S4 * self.C4
        self.SS5, self.CC5, self.SC5 = self.S5**2, self.C5**2, self.S5 * self.C5


def inertia_matrix(k: Constants, q: Sequence[float]) -> Array:
    """Inertia matrix with the drives on its diagonal, (6, 6) kg m^2."""
    p = Pose(q)
    a = np.zeros((7, 7))  # joints count from 1, as in the paper
    a[1, 1] = IM[0] + k["I1"] + k["I3"] * p.CC2 + k["I7"] * p.SS23 + k["I10"] * p.SC23 + k["I11"] * p.SC2
    a[1, 1] += k["I20"] * (p.SS5 * (p.SS23 * (1 + p.CC4) - 1) - 2 * p.SC23 * p.C4 * p.SC5) + k["I21"] * p.SS23 * p.CC4
    a[1, 1] += 2 * (k["I5"] * p.C2 * p.S23 + k["I12"] * p.C2 * p.C23 + k["I15"] * (p.SS23 * p.C5 + p.SC23 * p.C4 * p.S5))
    a[1, 1] += 2 * (k["I16"] * p.C2 * (p.S23 * p.C5 + p.C23 * p.C4 * p.S5) + k["I18"] * p.S4 * p.S5)
    a[1, 1] += 2 * k["I22"] * (p.SC23 * p.C5 + p.CC23 * p.C4 * p.S5)
    a[1, 3] = k["I8"] * p.C23 + k["I13"] * p.S23 - k["I15"] * p.C23 * p.S4 * p.S5 + k["I19"] * p.S23 * p.SC4
    a[1, 3] += k["I18"] * (p.S23 * p.C4 * p.S5 - p.C23 * p.C5) + k["I22"] * p.S23 * p.S4 * p.S5
    a[1, 3] += k["I20"] * p.S4 * (p.S23 * p.C4 * p.CC5 + p.C23 * p.SC5)
    a[1, 2] = a[1, 3] + k["I4"] * p.S2 + k["I9"] * p.C2 + k["I16"] * p.S2 * p.S4 * p.S5
    a[1, 4] = k["I14"] * p.C23 + k["I15"] * p.S23 * p.C4 * p.S5 + k["I16"] * p.C2 * p.C4 * p.S5 + k["I18"] * p.C23 * p.S4 * p.S5
    a[1, 4] += -k["I20"] * (p.S23 * p.C4 * p.SC5 + p.C23 * p.SS5) + k["I22"] * p.C23 * p.C4 * p.S5
    a[1, 5] = k["I15"] * p.S23 * p.S4 * p.C5 + k["I16"] * p.C2 * p.S4 * p.C5 + k["I17"] * p.S23 * p.S4
    a[1, 5] += k["I18"] * (p.S23 * p.S5 - p.C23 * p.C4 * p.C5) + k["I22"] * p.C23 * p.S4 * p.C5
    a[1, 6] = k["I23"] * (p.C23 * p.C5 - p.S23 * p.C4 * p.S5)
    elbow = k["I20"] * p.SS4 * p.SS5 + k["I21"] * p.SS4 + 2 * (k["I15"] * p.C5 + k["I22"] * p.C4 * p.S5)
    stretch = k["I5"] * p.S3 + k["I12"] * p.C3 + k["I16"] * (p.S3 * p.C5 + p.C3 * p.C4 * p.S5)
    a[2, 2] = IM[1] + k["I2"] + k["I6"] + elbow + 2 * stretch
    a[2, 3] = k["I6"] + elbow + stretch
    a[3, 3] = IM[2] + k["I6"] + elbow
    a[3, 4] = -k["I15"] * p.S4 * p.S5 + k["I20"] * p.S4 * p.SC5
    a[2, 4] = a[3, 4] - k["I16"] * p.S3 * p.S4 * p.S5
    a[3, 5] = k["I15"] * p.C4 * p.C5 + k["I17"] * p.C4 + k["I22"] * p.S5
    a[2, 5] = a[3, 5] + k["I16"] * (p.C3 * p.S5 + p.S3 * p.C4 * p.C5)
    a[2, 6] = a[3, 6] = k["I23"] * p.S4 * p.S5
    a[4, 4] = IM[3] + k["I14"] - k["I20"] * p.SS5
    a[4, 6] = k["I23"] * p.C5
    a[5, 5] = IM[4] + k["I17"]
    a[6, 6] = IM[5] + k["I23"]
    upper = a[1:, 1:]
    return upper + np.triu(upper, 1).T


def gravity_vector(k: Constants, q: Sequence[float]) -> Array:
    """Gravity torques, (6,) N m."""
    p = Pose(q)
    wrist = k["g5"] * (p.S23 * p.C5 + p.C23 * p.C4 * p.S5)
    g3 = k["g2"] * p.S23 + k["g4"] * p.C23 + wrist
    g2 = k["g1"] * p.C2 + k["g3"] * p.S2 + g3
    return np.array([0.0, g2, g3, -k["g5"] * p.S23 * p.S4 * p.S5, k["g5"] * (p.C23 * p.S5 + p.S23 * p.C4 * p.C5), 0.0])


def velocity_coefficients(k: Constants, q: Sequence[float]) -> dict[tuple[int, int, int], float]:
    """Coefficients printed one by one: (i, j, k) of qd_j qd_k in torque i, joints from 1; (i, j, j) are the centrifugal ones."""
    p = Pose(q)
    turned = 1 - 2 * p.SS23
    outer = k["I7"] * p.SC23 + k["I15"] * (2 * p.SC23 * p.C5 + turned * p.C4 * p.S5) + k["I21"] * p.SC23 * p.CC4
    outer += k["I20"] * ((1 + p.CC4) * p.SC23 * p.SS5 - turned * p.C4 * p.SC5)
    outer += k["I22"] * (turned * p.C5 - 2 * p.SC23 * p.C4 * p.S5)
    b: dict[tuple[int, int, int], float] = {}
    b[1, 1, 2] = 2 * (-k["I3"] * p.SC2 + k["I5"] * p.C223 - k["I12"] * p.S223 + k["I16"] * (p.C223 * p.C5 - p.S223 * p.C4 * p.S5))
    b[1, 1, 2] += 2 * outer + k["I10"] * turned + k["I11"] * (1 - 2 * p.SS2)
    b[1, 1, 3] = 2 * (k["I5"] * p.C2 * p.C23 - k["I12"] * p.C2 * p.S23 + k["I16"] * p.C2 * (p.C23 * p.C5 - p.S23 * p.C4 * p.S5))
    b[1, 1, 3] += 2 * outer + k["I10"] * turned
    b[1, 1, 4] = -k["I15"] * p.SC23 * p.S4 * p.S5 - k["I16"] * p.C2 * p.C23 * p.S4 * p.S5 + k["I18"] * p.C4 * p.S5
    b[1, 1, 4] += -k["I20"] * (p.SS23 * p.SS5 * p.SC4 - p.SC23 * p.S4 * p.SC5) - k["I22"] * p.CC23 * p.S4 * p.S5
    b[1, 1, 4] = 2 * (b[1, 1, 4] - k["I21"] * p.SS23 * p.SC4)
    b[1, 1, 5] = k["I20"] * (p.SC5 * (p.CC4 * (1 - p.CC23) - p.CC23) - p.SC23 * p.C4 * (1 - 2 * p.SS5))
    b[1, 1, 5] += -k["I15"] * (p.SS23 * p.S5 - p.SC23 * p.C4 * p.C5) - k["I16"] * p.C2 * (p.S23 * p.S5 - p.C23 * p.C4 * p.C5)
    b[1, 1, 5] = 2 * (b[1, 1, 5] + k["I18"] * p.S4 * p.C5 + k["I22"] * (p.CC23 * p.C4 * p.C5 - p.SC23 * p.S5))
    b[1, 1, 6] = 0.0
    swing = -k["I8"] * p.S23 + k["I13"] * p.C23 + k["I15"] * p.S23 * p.S4 * p.S5 + k["I18"] * (p.C23 * p.C4 * p.S5 + p.S23 * p.C5)
    swing += k["I19"] * p.C23 * p.SC4 + k["I20"] * p.S4 * (p.C23 * p.C4 * p.CC5 - p.S23 * p.SC5) + k["I22"] * p.C23 * p.S4 * p.S5
    b[1, 2, 3] = 2 * swing
    b[3, 1, 4] = -k["I15"] * p.C23 * p.C4 * p.S5 + k["I20"] * (p.S23 * (p.CC5 * p.CC4 - 0.5) + p.C23 * p.C4 * p.SC5)
    b[3, 1, 4] = k["I14"] * p.S23 + k["I19"] * p.S23 * (1 - 2 * p.SS4) + 2 * (b[3, 1, 4] + k["I22"] * p.S23 * p.C4 * p.S5)
    b[2, 1, 4] = b[3, 1, 4] + 2 * k["I16"] * p.S2 * p.C4 * p.S5
    b[2, 2, 3] = 2 * (-k["I12"] * p.S3 + k["I5"] * p.C3 + k["I16"] * (p.C3 * p.C5 - p.S3 * p.C4 * p.S5))
    b[2, 2, 4] = -k["I16"] * p.C3 * p.S4 * p.S5
    b[2, 2, 4] = 2 * (b[2, 2, 4] + k["I20"] * p.SC4 * p.SS5 + k["I21"] * p.SC4 - k["I22"] * p.S4 * p.S5)
    b[2, 2, 5] = -k["I15"] * p.S5 + k["I16"] * (p.C3 * p.C4 * p.C5 - p.S3 * p.S5) + k["I20"] * p.SS4 * p.SC5
    b[2, 2, 5] = 2 * (b[2, 2, 5] + k["I22"] * p.C4 * p.C5)
    b[2, 3, 5] = b[2, 2, 5]
    b[4, 1, 2], b[4, 1, 3] = -b[2, 1, 4], -b[3, 1, 4]
    b[4, 1, 5] = -k["I20"] * (p.S23 * p.C4 * (1 - 2 * p.SS5) + 2 * p.C23 * p.SC5) - k["I17"] * p.S23 * p.C4
    b[1, 2, 2] = k["I4"] * p.C2 - k["I9"] * p.S2 + k["I16"] * p.C2 * p.S4 * p.S5 + swing
    b[1, 3, 3] = b[1, 2, 3] / 2
    b[2, 1, 1], b[3, 1, 1] = -b[1, 1, 2] / 2, -b[1, 1, 3] / 2
    b[3, 2, 2], b[2, 3, 3] = -b[2, 2, 3] / 2, b[2, 2, 3] / 2
    b[1, 1, 1] = b[2, 2, 2] = b[3, 3, 3] = 0.0
    return b


def abbreviated_model(q: Sequence[float]) -> tuple[dict[tuple[int, int], float], dict[int, float]]:
    """The published model of 1 % significance: elements of the inertia matrix and gravity torques, joints from 1."""
    p = Pose(q)
    a = {
        (1, 1): 2.57 + 1.38 * p.CC2 + 0.30 * p.SS23 + 0.744 * p.C2 * p.S23,
        (1, 2): 0.690 * p.S2 - 0.134 * p.C23 + 0.0238 * p.C2,
        (1, 3): -0.134 * p.C23 - 0.00397 * p.S23,
        (2, 2): 6.79 + 0.744 * p.S3,
        (2, 3): 0.333 + 0.372 * p.S3 - 0.0110 * p.C3,
        (3, 3): 1.16,
    }
    return a, {2: -37.2 * p.C2 - 8.4 * p.S23 + 1.02 * p.S2, 3: -8.4 * p.S23 + 0.25 * p.C23}

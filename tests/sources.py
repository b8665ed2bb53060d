"""Outside truth: id -> full citation, or library with version. The only list of sources; a test names its source with `@source`.

Values quoted from memory and facts of the trade without a source are entries too, and say so.
"""

from collections.abc import Callable
from typing import Any, TypeVar

F = TypeVar("F", bound=Callable[..., Any])

SOURCES: dict[str, str] = {
    "common practice": "Common practice of the trade, no source.",
    "zlib": "CRC-32 of the Python standard library's zlib (the IEEE 802.3 polynomial).",
    "msgpack-spec": "MessagePack specification, github.com/msgpack/msgpack, spec.md: formats of integers, floats, arrays, maps.",
    "msgpack-vectors": "kawanet/msgpack-test-suite, github.com: published values with every legal form of each.",
    "msgpack-python": "Python package msgpack >= 1.0, another implementation of the format.",
    "crc-check": "CRC catalogue of G. Cook, CRC-32/ISO-HDLC: check 0xCBF43926, residue 0xDEBB20E3 (from memory).",
    "arm6_1986": "Armstrong, Khatib, Burdick, IEEE ICRA 1986, pp. 510-518, doi 10.1109/ROBOT.1986.1087644; from memory.",
    "textbook mechanics": "Elementary mechanics, in every textbook; derived by hand in the test.",
    "textbook mathematics": "Elementary mathematics, in every textbook; derived by hand in the test.",
    "featherstone2008": "R. Featherstone, Rigid Body Dynamics Algorithms, Springer 2008.",
    "pin": "Python wheel pin 4.1.0 (pinocchio), C++ rigid-body dynamics library.",
    "mujoco": "Python wheel mujoco 4.0.0, physics engine; compared in float64.",
    "numpy": "NumPy, its documented statistics functions.",
    "fips180-4": "NIST, FIPS PUB 180-4, Secure Hash Standard, 2015: SHA-256.",
    "rfc8259": "RFC 8259, The JavaScript Object Notation (JSON) Data Interchange Format, 2017.",
    "pep427": "PEP 427, The Wheel Binary Package Format 1.0, 2012.",
    "abramowitz1964": "M. Abramowitz, I. Stegun, Handbook of Mathematical Functions, 1964, ch. 17; from memory.",
    "landau1976": "L. D. Landau, E. M. Lifshitz, Mechanics, 3rd ed. 1976; from memory, integrated by hand in the test.",
    "cgpm1901": "3rd General Conference on Weights and Measures, 1901: standard gravity 9.80665 m/s^2 exactly.",
    "kelly2005": "R. Kelly, V. Santibanez, A. Loria, Control of Robot Manipulators in Joint Space, Springer, 2005 (from memory).",
    "flash-hogan1985": "T. Flash, N. Hogan, The coordination of arm movements, J. Neuroscience 5(7), 1985, pp. 1688-1703.",
    "takegaki-arimoto1981": "M. Takegaki, S. Arimoto, ASME J. Dynamic Systems, Measurement and Control 103, 1981, pp. 119-125.",
    "routh": "Routh-Hurwitz criterion, any textbook of control, e.g. Craig, Introduction to Robotics.",
    "siciliano2009": "B. Siciliano, L. Sciavicco, L. Villani, G. Oriolo, Robotics, Springer, 2009 (from memory).",
    "astrom-hagglund1995": "K. J. Astrom, T. Hagglund, PID Controllers: Theory, Design, and Tuning, 1995, sec. 3.5 (from memory).",
    "franklin1998": "G. F. Franklin, J. D. Powell, M. Workman, Digital Control of Dynamic Systems, 3rd ed. 1998 (from memory).",
    "graham-lathrop1953": "D. Graham, R. C. Lathrop, The Synthesis of Optimum Transient Response, Trans. AIEE 72, 1953, 273-288.",
    "mayeda1990": "H. Mayeda, K. Yoshida, K. Osuka, IEEE Trans. Robotics and Automation 6(3), 1990, 312-321 (from memory).",
    "gautier-khalil1990": "M. Gautier, W. Khalil, IEEE Trans. Robotics and Automation 6(3), 1990, 368-373 (from memory).",
    "khatib1987": "O. Khatib, IEEE J. Robotics and Automation 3(1), 1987, 43-53 (from memory).",
    "wgs84": "WGS 84 normal gravity, Somigliana's formula, NIMA TR8350.2: equator 9.7803253359, pole 9.8321849378.",
    "scipy": "SciPy >= 1.15, general-purpose numerical library.",
}


def source(identifier: str, where: str = "") -> Callable[[F], F]:
    """Name the source of the numbers or the rule a test checks against: an id of `SOURCES`, and where in it.

    Raises KeyError for an id that is not listed, when the test module is imported.
    """
    citation = SOURCES[identifier]

    def attach(test: F) -> F:
        test.sources = [*getattr(test, "sources", []), (citation, where)]  # type: ignore[attr-defined]  # functions take attributes
        return test

    return attach

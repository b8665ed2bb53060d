"""Control laws, one per file: name, terms, equation, source, `prepare` (cold) and `torque` (compiled, returns a status).

A law gives its torque as an ordered sum of named terms, so that every torque can be read for what it was made of; the cycle
forms the sum and records the terms. A law limits nothing: the supervisor's gate does. Start in `pd`, then `computed_torque`.
"""

from rtctl.laws.registry import Law, can_raise, law_names, load_law

__all__ = ["Law", "can_raise", "law_names", "load_law"]

"""The safety supervisor.

Watches turn signals into conditions, fold makes them one stop, decide picks the mode, the gate lets torque out.

It is not a safety-rated control. Start reading at `decision.py`.
"""

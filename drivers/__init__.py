"""Drivers: the processes between the messages of `WIRE.md` and an arm. Installed as `rtctl_drivers`; run one with `python -m`.

`template.py` is where a driver for hardware begins. Nothing in `rtctl` imports from here.
"""

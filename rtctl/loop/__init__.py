"""The loop at a fixed rate: the compiled live loop, its threads and start-up, the control channel, and the lock-step link.

Start reading in `live.py` (one compiled function holds the whole cycle), then `startup.py` (what must be done before it, in which
order) and `controller.py` (threads, signals, exits). `lockstep.py` runs the same cycle without sockets and without time.
`flags.py` imports the standard library only, so that a stop request does not wait for anything heavy.
"""

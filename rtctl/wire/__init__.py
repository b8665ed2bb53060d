"""Messages between controller and driver: what the bytes mean is `drivers/WIRE.md`, the compiled codec is `codec.py`.

Start reading in `codec.py`; `refusals.py` lists why a message is refused. No socket and no clock here.
"""

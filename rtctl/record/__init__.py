"""The record of every cycle: a ring in shared memory, the recorder process that drains it into a file, and the reader of that file.

Start reading at `ring.py` (memory shared by loop and recorder), then `file.py` (the record file, byte for byte), `recorder.py`
(the process between them) and `reader.py`. `append.py` is the one compiled part: nothing else here imports the compiler, so that
a recorder starts in a fraction of a second.
"""

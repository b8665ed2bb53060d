"""The simulated arm: physics of the true arm and the duties of its driver, without a clock and without a socket.

Start in `driver_duty` (what a driver must do with every torque message), then `physics` (one substep of motion). `blocks` holds the
two memory blocks, `build` fills them, `truth` reads the exact state and energies that no message shows.
Not in here: the process with sockets and real time (`drivers/sim_arm.py`), and faults that a drill injects.
"""

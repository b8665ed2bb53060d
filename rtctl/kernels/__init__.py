"""Compiled functions: dynamics, kinematics, friction, small algebra, and the memory and calls they stand on."""

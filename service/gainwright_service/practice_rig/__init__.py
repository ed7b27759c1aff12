"""The practice rig: a pilot dye house of five live loops, served over Modbus TCP by a process of its own.

Stands in for the plant and its controllers, and for nothing of the service: it speaks only through its registers, its
log and, for the person at it, lines on its standard input.
"""

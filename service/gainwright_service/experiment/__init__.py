"""The experiment: a pure, table-driven machine with its plan, excitation, scoring and guard.

Standard library and `gainwright.relay` only. Nothing here reads a clock, opens a device or knows the store.
"""

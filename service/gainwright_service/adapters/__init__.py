"""Adapters: how a loop's device is read and moved. The contract stands in `port`."""

"""Simulate a cell, its wiring and the instruments, behind real sockets."""

"""Bytes and time: serial ports, sockets, faults put in on purpose, and clocks that may be virtual. Knows no
lines.
"""

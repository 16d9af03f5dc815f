"""Bytes from a serial port, TCP or a file into Blocks, every sample accounted for."""

"""Frames of a serial digitizer: bytes in, runs of samples out. The format is in FORMAT.md; no I/O here."""

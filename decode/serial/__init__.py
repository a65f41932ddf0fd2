"""Edges to frames: clock bursts, fields, Gray, parity, CRC."""

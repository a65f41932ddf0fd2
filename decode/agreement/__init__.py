"""Frames and counts to the residual between them: offset, direction, scale, latency, steps."""

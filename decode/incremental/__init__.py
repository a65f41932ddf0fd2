"""Edges to counts: quadrature, index, spacing."""

"""Edges to conditioned edges: complementary pairs, pulses too short to be real, lines that never move."""

"""All that was measured and found wrong, turned into measurements, findings and a verdict."""

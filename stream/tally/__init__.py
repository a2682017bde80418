"""Counting: exact integer histograms by stratum."""

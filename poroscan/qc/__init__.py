"""Limits, statistics, charts and comparison of batches."""

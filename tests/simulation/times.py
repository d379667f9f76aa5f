"""Simulated time in whole nanoseconds."""

MS = 1_000_000
SECOND = 1000 * MS

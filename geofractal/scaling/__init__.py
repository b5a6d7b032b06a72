"""Ladder, fit, interval and verdict: shared by every estimator, knows no files."""

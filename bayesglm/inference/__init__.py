"""Sampling, diagnosis and results."""

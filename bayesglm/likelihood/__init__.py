"""Likelihoods as digests: what of a recording is kept, and how its uncertainty is calibrated."""

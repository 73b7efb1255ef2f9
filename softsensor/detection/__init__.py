"""Fault tests and diagnosis: cumulative sums, run lengths, signatures, likelihoods, flags."""

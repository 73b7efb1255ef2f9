"""The Kalman estimator: its kernel, late results, steady state, observability."""

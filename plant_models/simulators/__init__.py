"""Nonlinear first-principles plants to try the estimator on."""

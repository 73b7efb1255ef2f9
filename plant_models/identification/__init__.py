"""From step tests to transfer functions with confidence intervals."""

"""A Kalman soft sensor for chemical plants. Advisory only: it never writes to the control system."""

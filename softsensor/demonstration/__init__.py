"""The demonstration: a simulated plant behind a real OPC UA server, and what the service makes of it, scored."""

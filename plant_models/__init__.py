"""What the plant is: model files, transfer functions, their exact discretisation, published models, simulators."""

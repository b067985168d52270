"""foldwright: the smallest hardware that runs a fixed-point algorithm at its sample rate."""

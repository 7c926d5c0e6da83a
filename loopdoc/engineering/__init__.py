"""What it means: scaling, direction, pairing, PID, frequency response, simulation."""

"""What a simulation is held against: count equilibrium, master equation, rate equations."""

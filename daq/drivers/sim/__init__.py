"""The parts of the simulated source: its machines, their motion, their signals, its faults."""

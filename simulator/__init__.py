"""Simulated rigs and emulated instruments: numpy only, never daq or drivers, on purpose."""

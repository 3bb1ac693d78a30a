"""Pluggable instruments: imports serial and Modbus libraries, never daq, never simulator."""

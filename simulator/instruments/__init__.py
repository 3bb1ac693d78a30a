"""Emulated instruments, with protocol code of their own."""

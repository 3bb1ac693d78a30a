"""What people look at in a terminal. Reads only."""

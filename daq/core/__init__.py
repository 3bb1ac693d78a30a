"""Pure: no files, sockets, clock, random numbers, threads, logging or globals."""

"""Everything that touches a socket, a clock, a file or a process."""

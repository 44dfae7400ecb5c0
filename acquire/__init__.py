"""Getting readings: configuration, instruments, journals, bus, simulated laboratory."""

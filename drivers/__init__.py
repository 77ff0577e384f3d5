"""What stands on the bench: the probe's line, its serial port, and a bench in software."""

"""Water or probe: what the readings themselves tell of the probe, and slow changes of the water."""

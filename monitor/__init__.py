"""stillbrine's core: from log text to findings, and the programs around it."""

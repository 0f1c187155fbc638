"""Along the lines: what is taken from the readings, stage by stage, and how noisy they are."""

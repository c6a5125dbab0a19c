"""What users hold: accumulators, one file each, over one shared base and one door."""

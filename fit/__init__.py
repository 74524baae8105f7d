"""What it means: difference, episodes, models, estimates, region, planning."""

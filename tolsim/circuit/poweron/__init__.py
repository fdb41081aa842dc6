"""What happens to each unit when it is switched on: the real ramp, from zero charge to its fate."""

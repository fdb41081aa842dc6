"""The adjuster at the bench: reads a meter, turns one part of each unit, stops when content."""

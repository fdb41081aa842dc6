"""Statistics from arrays: proportions, percentiles and rankings, each with its interval."""

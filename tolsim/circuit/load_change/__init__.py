"""A change of load in time: what carries over, what the way to the next state asks of the parts."""

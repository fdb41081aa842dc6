"""The batched circuit core: network, devices, bias, start criterion, periodic steady state.

Inside this package the unit axis is last, so that every elementary operation runs over
contiguous memory; at its doors (figures, status words) the unit axis is first.
"""

"""One device: typed operations, lease, limits, stop, clock fit and sample blocks."""

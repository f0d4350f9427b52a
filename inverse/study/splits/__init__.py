"""Which process bonds better: wafers, splits, repeated measurements, power."""

"""From a configuration to products, one straight line for every kind of measurement."""

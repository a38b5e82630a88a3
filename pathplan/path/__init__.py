"""Task to Cartesian path to joint path q(s)."""

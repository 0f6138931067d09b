"""Pure functions of X-ray physics: cross sections, tube, sensor, counting."""

"""The main job on a scenario of our own, from invented scan to report."""

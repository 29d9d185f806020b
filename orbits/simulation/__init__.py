"""Simulated observations: an array, a star and noise to OIFITS nights and velocities."""

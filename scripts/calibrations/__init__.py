"""Simulations that check statistical claims."""

"""Pixels to flux, variance, sky and flags: electrons counted in apertures, whatever they mean."""

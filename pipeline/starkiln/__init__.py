"""Effective temperatures, radii and luminosities of stars from survey photometry."""

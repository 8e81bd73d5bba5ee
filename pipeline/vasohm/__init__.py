"""Vascular resistance with honest uncertainty, from images of vessel beds."""

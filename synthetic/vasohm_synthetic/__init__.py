"""Phantoms of vessel beds with exact truth; shares no line of code with the package that measures them."""

"""Invented logs of each kind, with the dirt of its trade and the truth about it."""

"""Gains for positive networks by linear programs (theory (17))."""

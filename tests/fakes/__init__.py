"""Doubles that keep the protocols of the real parts."""

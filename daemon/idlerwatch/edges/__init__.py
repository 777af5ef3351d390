"""The world outside, one module a thing in it; nothing is decided here."""

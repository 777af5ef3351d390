"""The commands, one module a command."""

"""The virtual converter: a plant, meters on it, and a serial line with faults."""

"""The chain of small steps from readings to assessments and alarm events."""

"""idlerwatch watches a running rotary phase converter and tells its owner in time."""

__version__ = "0.1.0"

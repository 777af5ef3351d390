"""Settings: a mapping goes in; the settings, or every fault with its place, come out."""

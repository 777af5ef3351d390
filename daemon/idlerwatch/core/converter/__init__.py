"""The converter seen as conductors and as a circuit."""

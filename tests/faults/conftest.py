from servers import broker

__all__ = ["broker"]

from servers import broker, influxd, victoria

__all__ = ["broker", "influxd", "victoria"]

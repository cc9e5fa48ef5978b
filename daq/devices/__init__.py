"""Devices: links, drivers and the run clock; the only place that knows serial ports and VISA."""

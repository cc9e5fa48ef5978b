"""The service's figures for a collector, behind the same gate as the page."""

from __future__ import annotations

from pathlib import Path

from flask import Flask, Response

METRICS = "metrics.prom"
OPEN_METRICS = "application/openmetrics-text; version=1.0.0; charset=utf-8"


def add_metrics(server: Flask, lab: Path) -> None:
    """Add the route that gives the figures which the service wrote last."""

    @server.get("/metrics")
    def metrics() -> Response:
        try:
            return Response((lab / METRICS).read_bytes(), content_type=OPEN_METRICS)
        except OSError:
            return Response("no service has written figures here yet\n", 404, content_type="text/plain")

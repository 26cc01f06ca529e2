"""The daemon."""

from __future__ import annotations

from monitor.site import Site


def serve(site: Site) -> int:
    raise NotImplementedError

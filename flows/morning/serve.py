"""Runs the review page as a server until it is told to stop."""

from __future__ import annotations

import ipaddress
from collections.abc import Callable, Sequence
from datetime import UTC, datetime
from pathlib import Path

from flows.site.configuration import load_configuration
from flows.site.layout import Site
from models.errors import SiteError


def serve(
    site: Site,
    host: str,
    port: int | None,
    host_names: Sequence[str],
    certificate: Path | None,
    key: Path | None,
    *,
    announce: Callable[[str], object],
) -> None:
    """Serve until SIGTERM or Ctrl-C.

    Parameters
    ----------
    host, port
        Where to listen; port None takes that of config/site.toml.
    host_names
        Names under which browsers reach it, beside loopback and `host`.
    certificate, key
        For TLS; both or none.
    announce
        Told the address once.

    Raises
    ------
    SiteError
        If it would be reached from elsewhere without TLS, or only one of certificate and key is given.
    """
    import uvicorn

    from flows.morning.app import LOOPBACK, create_app

    if (certificate is None) != (key is None):
        raise SiteError("TLS needs both a certificate and its key", remedy="give --certificate and --key")
    if certificate is None and not _is_loopback(host):
        raise SiteError(
            f"{host} can be reached from other machines, and passwords would cross the network in the clear",
            remedy="give --certificate and --key, or listen on 127.0.0.1 behind a proxy that does TLS",
        )
    number = load_configuration(site.config).settings.morning_port if port is None else port
    secure = certificate is not None
    hosts = (*LOOPBACK, host, *host_names)
    app = create_app(site, lambda: datetime.now(UTC), hosts=hosts, secure=secure)
    announce(f"The review page is at {'https' if secure else 'http'}://{(*host_names, host)[0]}:{number}/")
    uvicorn.run(
        app,
        host=host,
        port=number,
        log_level="warning",
        server_header=False,
        ssl_certfile=certificate,
        ssl_keyfile=key,
        timeout_graceful_shutdown=5,
    )


def _is_loopback(host: str) -> bool:
    try:
        return ipaddress.ip_address(host).is_loopback
    except ValueError:
        return host == "localhost"

"""Taking events from brokers: one module a kind behind the small port in `broker`, one engine for all of them.

`make_broker` knows the kinds and imports a kind's module, and with it the client's package, only when one is made.
"""

from __future__ import annotations

import importlib

from ..config_intakes import IntakeConfig
from ..errors import StrandlineError
from .broker import Broker

# kind -> module, class, and the extra that brings the client.
INTAKE_KINDS: dict[str, tuple[str, str, str]] = {
    "jetstream": ("jetstream", "JetstreamBroker", "nats"),
    "mqtt": ("mqtt", "MqttBroker", "mqtt"),
}


def make_broker(config: IntakeConfig) -> Broker:
    """The broker that an intake's configuration describes; nothing is connected yet.

    Raises StrandlineError where the client is not installed.
    """
    module, name, extra = INTAKE_KINDS[config.kind]
    try:
        maker = getattr(importlib.import_module(f".{module}", __name__), name)
    except ModuleNotFoundError as error:
        advice = f"install strandline with its extra: pip install 'strandline[{extra}]'"
        raise StrandlineError(f"an intake of kind {config.kind} needs the package {error.name}: {advice}") from error
    broker: Broker = maker(config)
    return broker

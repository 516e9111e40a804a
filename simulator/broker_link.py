"""The connection of an MQTT publisher: it connects again by itself; it can be cut and restored as a cable."""

import socket
from collections.abc import Callable
from contextlib import suppress
from threading import Event
from urllib.parse import urlsplit

from paho.mqtt.client import Client, ConnectFlags, DisconnectFlags
from paho.mqtt.enums import CallbackAPIVersion, MQTTProtocolVersion
from paho.mqtt.properties import Properties
from paho.mqtt.reasoncodes import ReasonCode

_KEEPALIVE_S = 15


def _nothing(client: Client) -> None:
    del client


class BrokerLink:
    """One client on one broker.

    Parameters
    ----------
    address : str
        mqtt://host or mqtt://host:port.
    client_id : str
        By which the broker knows it.
    before_connecting, connected : Callable
        Called on paho's thread before each attempt and after each success.
    """

    def __init__(
        self,
        address: str,
        *,
        client_id: str,
        before_connecting: Callable[[Client], None] = _nothing,
        connected: Callable[[Client], None] = _nothing,
    ) -> None:
        url = urlsplit(address)
        if url.scheme != "mqtt" or not url.hostname:
            raise ValueError(f"{address!r} is not mqtt://host:port")
        self._host, self._port = url.hostname, url.port or 1883
        self._before_connecting, self._connected = before_connecting, connected
        self._up = Event()
        self._is_cut = False
        client = Client(
            CallbackAPIVersion.VERSION2, client_id=client_id, protocol=MQTTProtocolVersion.MQTTv311
        )
        client.reconnect_delay_set(min_delay=1, max_delay=5)
        client.on_pre_connect = self._on_pre_connect
        client.on_connect = self._on_connect
        client.on_disconnect = self._on_disconnect
        self.client = client

    @property
    def up(self) -> bool:
        return self._up.is_set()

    @property
    def is_cut(self) -> bool:
        return self._is_cut

    def open(self) -> None:
        self.client.connect_async(self._host, self._port, keepalive=_KEEPALIVE_S)
        self.client.loop_start()

    def cut(self) -> None:
        """Drop the connection without a word, as a cut cable does, and stay away."""
        self._is_cut = True
        self._up.clear()
        self.client.reconnect_delay_set(min_delay=1, max_delay=1)
        self._hang_up()

    def restore(self) -> None:
        """Connect again, within a second if the broker is there."""
        self._is_cut = False
        self.client.reconnect_delay_set(min_delay=1, max_delay=5)

    def close(self) -> None:
        connected = self.up
        self.client.disconnect()
        if connected:  # else its thread may sleep for a second before it looks; it ends by itself
            self.client.loop_stop()

    def _hang_up(self) -> None:
        connection = self.client.socket()
        if isinstance(connection, socket.socket):
            with suppress(OSError):
                connection.shutdown(socket.SHUT_RDWR)

    # on paho's thread

    def _on_pre_connect(self, client: Client, userdata: object) -> None:
        del userdata
        if self._is_cut:
            raise ConnectionError("the cable is cut")  # paho takes it for an attempt that failed
        self._before_connecting(client)

    def _on_connect(
        self,
        client: Client,
        userdata: object,
        flags: ConnectFlags,
        reason: ReasonCode,
        properties: Properties | None,
    ) -> None:
        del userdata, flags, properties
        if self._is_cut:  # cut while it was connecting
            self._hang_up()
        elif not reason.is_failure:
            self._connected(client)
            self._up.set()

    def _on_disconnect(
        self,
        client: Client,
        userdata: object,
        flags: DisconnectFlags,
        reason: ReasonCode,
        properties: Properties | None,
    ) -> None:
        del client, userdata, flags, reason, properties
        self._up.clear()

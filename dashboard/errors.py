"""What can go wrong in this room.

ServeError
    NotLoopbackError    the address asked for could be reached by others
    PortTakenError      the address cannot be listened on
"""


class ServeError(Exception):
    """The pages cannot be served; the message is for the person who started them."""


class NotLoopbackError(ServeError):
    def __init__(self, host: str) -> None:
        self.host = host
        super().__init__(
            f"host {host!r} is refused: the pages have no accounts yet and are served on this machine only. "
            "Use 127.0.0.1, ::1 or localhost."
        )


class PortTakenError(ServeError):
    def __init__(self, host: str, port: int, cause: OSError) -> None:
        self.host, self.port = host, port
        super().__init__(
            f"cannot listen on {host} port {port}: {cause.strerror or cause}. Choose another --port."
        )

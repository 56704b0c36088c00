"""The instrument's socket on 127.0.0.1: raw TCP, one line a message, replies as told, faults on request."""

from __future__ import annotations

import contextlib
import socket
import threading
import time

from tools.loopback.language import Instrument, RefusalError, Reply
from tools.loopback.misbehave import Misbehaviour
from tools.loopback.source import Source


class LoopbackScope:
    """Serve ``source`` on a port of 127.0.0.1 (0: any free one) from threads of this process.

    Parameters
    ----------
    duration : float
        How long an acquisition takes (s).
    line_end, reply_end : bytes
        What ends a message to the instrument, and a reply.
    """

    def __init__(
        self,
        source: Source,
        *,
        port: int = 0,
        misbehaviour: Misbehaviour | None = None,
        duration: float = 0.0,
        line_end: bytes = b"\n",
        reply_end: bytes = b"\n",
    ) -> None:
        self.instrument = Instrument(source, misbehaviour or Misbehaviour(), duration=duration)
        self.port = port
        self.line_end, self.reply_end = line_end, reply_end
        self.connections = 0
        self._listener: socket.socket | None = None
        self._open: set[socket.socket] = set()
        self._stopping = threading.Event()
        self._threads: list[threading.Thread] = []

    @property
    def resource(self) -> str:
        """The VISA resource string."""
        return f"TCPIP::127.0.0.1::{self.port}::SOCKET"

    def start(self) -> LoopbackScope:
        """Listen, and serve in the background."""
        self._stopping.clear()
        self._listen()
        self._run(self._accept)
        return self

    def stop(self) -> None:
        """Close everything; ``start`` serves the same port again."""
        self._stopping.set()
        self._close_all()
        for thread in self._threads:
            thread.join(timeout=5.0)
        self._threads.clear()

    def __enter__(self) -> LoopbackScope:
        return self.start()

    def __exit__(self, *exc: object) -> None:
        self.stop()

    def _run(self, function: object, *args: object) -> None:
        self._threads = [thread for thread in self._threads if thread.is_alive()]
        thread = threading.Thread(target=function, args=args, daemon=True)  # type: ignore[arg-type]
        self._threads.append(thread)
        thread.start()

    def _listen(self) -> None:
        listener = socket.socket(socket.AF_INET, socket.SOCK_STREAM)
        listener.setsockopt(socket.SOL_SOCKET, socket.SO_REUSEADDR, 1)
        listener.bind(("127.0.0.1", self.port))
        listener.listen()
        listener.settimeout(0.1)
        self.port = listener.getsockname()[1]
        self._listener = listener

    def _close_all(self) -> None:
        if self._listener is not None:
            self._listener.close()
            self._listener = None
        for connection in list(self._open):
            with contextlib.suppress(OSError):
                connection.shutdown(socket.SHUT_RDWR)

    def _accept(self) -> None:
        while not self._stopping.is_set():
            listener = self._listener
            if listener is None:
                # Refusing: come back on the same port after a while.
                if self._stopping.wait(self.instrument.misbehaviour.refuse_for):
                    return
                self._listen()
                continue
            try:
                connection, _ = listener.accept()
            except TimeoutError:
                continue
            except OSError:
                continue
            self.connections += 1
            self.instrument.misbehaviour.forget()
            connection.setsockopt(socket.IPPROTO_TCP, socket.TCP_NODELAY, 1)
            connection.settimeout(None)
            self._open.add(connection)
            self._run(self._serve, connection)

    def _serve(self, connection: socket.socket) -> None:
        waiting = b""
        try:
            while not self._stopping.is_set():
                while self.line_end in waiting:
                    line, waiting = waiting.split(self.line_end, 1)
                    for reply in self.instrument.execute(line.decode("ascii", "replace").strip()):
                        self._send(connection, reply)
                data = connection.recv(65536)
                if not data:
                    return
                waiting += data
        except RefusalError:
            self._close_all()
        except OSError:
            pass
        finally:
            self._open.discard(connection)
            connection.close()

    def _send(self, connection: socket.socket, reply: Reply) -> None:
        misbehaviour = self.instrument.misbehaviour
        kind = misbehaviour.for_reply(reply.is_block)
        half = reply[: max(1, len(reply) // 2)]
        if kind == "late":
            if self._stopping.wait(misbehaviour.late_by):
                return
            connection.sendall(reply + self.reply_end)
        elif kind == "silent":
            return
        elif kind == "cut":
            connection.sendall(half)
        elif kind == "short":
            connection.sendall(reply[:-7] + self.reply_end)
        elif kind == "long":
            connection.sendall(reply + b"\x00\x0a\x37" + self.reply_end)
        elif kind == "garbage":
            connection.sendall(misbehaviour.garbage())
        elif kind == "closing":
            connection.sendall(half)
            connection.shutdown(socket.SHUT_RDWR)
            raise ConnectionAbortedError
        elif kind == "slow":
            self._trickle(connection, reply + self.reply_end, misbehaviour.trickle)
        elif kind == "left-over":
            connection.sendall(reply + self.reply_end + self.reply_end)
        else:
            connection.sendall(reply + self.reply_end)

    def _trickle(self, connection: socket.socket, data: bytes, rate: float) -> None:
        for position in range(len(data)):
            connection.sendall(data[position : position + 1])
            if self._stopping.is_set():
                return
            time.sleep(1.0 / rate)

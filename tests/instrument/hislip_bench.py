"""The loopback instrument behind HiSLIP (IVI-6.1): a bus whose messages have an END of their own."""

from __future__ import annotations

import contextlib
import socket
import struct
import threading

from tools.loopback.language import Instrument

HEADER = "!2sBBIQ"
INITIALIZE, INITIALIZE_RESPONSE, DATA, DATA_END = 0, 1, 6, 7
ANSWERS = {4: 5, 8: 9, 10: 11, 17: 18, 19: 23, 21: 22}
MAX_SIZE, MAX_SIZE_RESPONSE = 15, 16


class HislipBench:
    """Serve an instrument; ``end`` follows each reply, ``spoil`` may change it."""

    def __init__(self, instrument: Instrument, end: bytes = b"\n") -> None:
        self.instrument, self.end = instrument, end
        self.spoil = lambda reply: reply
        self._listener = socket.socket()
        self._listener.bind(("127.0.0.1", 0))
        self._listener.listen()
        self._open = [self._listener]
        self._threads: list[threading.Thread] = []
        self._run(self._accept)

    @property
    def resource(self) -> str:
        return f"TCPIP::127.0.0.1::hislip0,{self._listener.getsockname()[1]}::INSTR"

    def stop(self) -> None:
        for each in self._open:
            with contextlib.suppress(OSError):
                each.shutdown(socket.SHUT_RDWR)
            each.close()
        for thread in self._threads:
            thread.join(timeout=5)

    def _run(self, function, *args) -> None:
        thread = threading.Thread(target=function, args=args, daemon=True)
        self._threads.append(thread)
        thread.start()

    def _accept(self) -> None:
        while True:
            try:
                connection, _ = self._listener.accept()
            except OSError:
                return
            self._open.append(connection)
            self._run(self._talk, connection)

    def _talk(self, connection: socket.socket) -> None:
        waiting = b""
        try:
            while True:
                kind, parameter, payload = self._message(connection)
                if kind == INITIALIZE:
                    self._send(connection, INITIALIZE_RESPONSE, (1 << 8) << 16 | 7)
                elif kind == MAX_SIZE:
                    self._send(connection, MAX_SIZE_RESPONSE, 0, struct.pack("!Q", 1 << 20))
                elif kind in (DATA, DATA_END):
                    waiting += payload
                    if kind == DATA_END:
                        text, waiting = waiting.decode("ascii").strip(), b""
                        for reply in self.instrument.execute(text):
                            self._send(connection, DATA_END, parameter, self.spoil(bytes(reply)) + self.end)
                elif kind in ANSWERS:
                    self._send(connection, ANSWERS[kind], 0)
        except (OSError, EOFError):
            pass

    @staticmethod
    def _message(connection: socket.socket) -> tuple[int, int, bytes]:
        def exactly(count: int) -> bytes:
            found = b""
            while len(found) < count:
                data = connection.recv(count - len(found))
                if not data:
                    raise EOFError
                found += data
            return found

        _, kind, _, parameter, size = struct.unpack(HEADER, exactly(struct.calcsize(HEADER)))
        return kind, parameter, exactly(size)

    @staticmethod
    def _send(connection: socket.socket, kind: int, parameter: int, payload: bytes = b"") -> None:
        connection.sendall(struct.pack(HEADER, b"HS", kind, 0, parameter, len(payload)) + payload)

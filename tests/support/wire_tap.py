"""A TCP relay between the program and a simulated board that reads along.

It takes the host's frames apart by drivers/framed.md on its own, so that a test can say what was
written to the board, whatever the program claims. Python's standard library only.
"""

import socket
import threading

ALL_BITS = None  # the mask of a write that names none


def crc32c(data):
    """CRC-32C as RFC 3720, appendix B.4, has it."""
    crc = 0xFFFFFFFF
    for byte in data:
        crc ^= byte
        for _ in range(8):
            crc = (crc >> 1) ^ (0x82F63B78 if crc & 1 else 0)
    return crc ^ 0xFFFFFFFF


def uncobs(coded):
    """The bytes behind consistent overhead byte stuffing (Cheshire and Baker 1999)."""
    out, at = bytearray(), 0
    while at < len(coded):
        run = coded[at]
        if run == 0 or at + run > len(coded):
            raise ValueError("no good COBS")
        out += coded[at + 1:at + run]
        at += run
        if run < 255 and at < len(coded):
            out.append(0)
    return bytes(out)


class Reader:
    def __init__(self, data):
        self.data, self.at = data, 0

    def byte(self):
        self.at += 1
        return self.data[self.at - 1]

    def varint(self):
        value, shift = 0, 0
        while True:
            byte = self.byte()
            value |= (byte & 0x7F) << shift
            shift += 7
            if byte < 0x80:
                return value

    def left(self):
        return len(self.data) - self.at


def writes_of(payload):
    """(address, mask, value) of every write in a batch, in order."""
    reader = Reader(payload)
    if reader.byte() != 2:
        return []
    reader.varint()      # slot
    reader.at += 4       # count, tag
    reader.varint()      # boot number
    address, out = 0, []
    while reader.left():
        code = reader.byte()
        kind, step = code & 7, code >> 3 & 3
        if step == 1:
            address = (address + 1) & 0xFFFFFFFF
        elif step == 2:
            zigzag = reader.varint()
            address = (address + (zigzag >> 1 ^ -(zigzag & 1))) & 0xFFFFFFFF
        mask = reader.varint() if code & 0x20 else ALL_BITS
        if kind in (1, 2):
            out.append((address, mask, reader.varint()))
        elif kind == 3:
            reader.varint(), reader.varint()
        elif kind == 4:
            reader.varint()
    return out


class Tap:
    """Relays connections to HOST:PORT; `writes` is what the host wrote since the start."""

    def __init__(self, target):
        host, port = target.rsplit(":", 1)
        self.target = (host, int(port))
        self.writes, self.frames, self.bad_frames = [], 0, 0
        self.mute = False  # while set, nothing comes through in either direction
        self.open = []
        self.listener = socket.create_server(("127.0.0.1", 0))
        self.link = f"tcp:127.0.0.1:{self.listener.getsockname()[1]}"
        self.lock = threading.Lock()
        threading.Thread(target=self.accept, daemon=True).start()

    def accept(self):
        while True:
            try:
                near, _ = self.listener.accept()
            except OSError:
                return
            try:
                far = socket.create_connection(self.target)
            except OSError:
                near.close()
                continue
            for end in (near, far):
                end.setsockopt(socket.IPPROTO_TCP, socket.TCP_NODELAY, 1)
                self.open.append(end)
            threading.Thread(target=self.relay, args=(near, far, True), daemon=True).start()
            threading.Thread(target=self.relay, args=(far, near, False), daemon=True).start()

    def relay(self, source, sink, from_host):
        pending = b""
        try:
            while data := source.recv(65536):
                if self.mute:
                    continue
                if from_host:
                    *frames, pending = (pending + data).split(b"\0")
                    self.note(frames)
                sink.sendall(data)
        except OSError:
            pass
        for end in (source, sink):
            try:
                end.shutdown(socket.SHUT_RDWR)
            except OSError:
                pass

    def note(self, frames):
        for frame in frames:
            if not frame:
                continue
            try:
                body = uncobs(frame)
                good = crc32c(body[:-4]) == int.from_bytes(body[-4:], "little")
            except ValueError:
                good = False
            with self.lock:
                if good:
                    self.frames += 1
                    self.writes += writes_of(body[:-4])
                else:
                    self.bad_frames += 1

    def close(self):
        self.listener.close()
        for end in self.open:
            end.close()

    def __enter__(self):
        return self

    def __exit__(self, *_):
        self.close()

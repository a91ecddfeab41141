"""A host side of the `framed` dialect as drivers/framed.md tells a stranger to write it: enough to
read and write registers by hand. Python's standard library only.
"""

import socket

from wire_tap import Reader, crc32c, uncobs


def varint(value):
    out = bytearray()
    while value > 0x7F:
        out.append(value & 0x7F | 0x80)
        value >>= 7
    out.append(value)
    return bytes(out)


def cobs(data):
    out, rest = bytearray(), bytes(data)
    while True:
        run = rest[:254].split(b"\0")[0]
        out.append(len(run) + 1)
        out += run
        if len(run) == len(rest):
            return bytes(out)
        rest = rest[len(run) + (len(run) < 254):]


class Host:
    """One link, one session, one batch at a time; any failed operation is an AssertionError."""

    def __init__(self, target):
        host, port = target.rsplit(":", 1)
        self.socket = socket.create_connection((host, int(port)), timeout=5)
        self.pending = b""
        self.count = 0
        answer = self.ask(b"\x01\x01\x01" + (0x51A7E).to_bytes(4, "little"))
        assert answer.byte() == 0x81, "no answer to hello"
        answer.at += 6
        self.boot = answer.varint()

    def ask(self, payload):
        body = payload + crc32c(payload).to_bytes(4, "little")
        self.socket.sendall(b"\0" + cobs(body) + b"\0")
        while True:
            frame, zero, rest = self.pending.partition(b"\0")
            if zero:
                self.pending = rest
                if frame:
                    body = uncobs(frame)
                    assert crc32c(body[:-4]) == int.from_bytes(body[-4:], "little")
                    return Reader(body[:-4])
            else:
                data = self.socket.recv(4096)
                assert data, "the board closed the link"
                self.pending += data

    def batch(self, operations):
        self.count += 1
        reply = self.ask(b"\x02\0" + self.count.to_bytes(2, "little")
                         + (0x1A7E).to_bytes(2, "little") + varint(self.boot) + operations)
        assert reply.byte() == 0x82, "an error reply"
        reply.at += 5
        assert reply.varint() == self.boot
        assert reply.byte() == 0, "an operation failed"
        return reply

    def write(self, address, mask, value):
        self.batch(b"\x31" + varint(address << 1) + varint(mask) + varint(value))

    def read(self, address):
        return self.batch(b"\x10" + varint(address << 1)).varint()

    def close(self):
        self.socket.close()

    def __enter__(self):
        return self

    def __exit__(self, *_):
        self.close()

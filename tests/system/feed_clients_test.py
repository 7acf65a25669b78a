"""Subscribers over TCP and Unix sockets, in both encodings, well and badly behaved."""

import importlib.util
import json
import pathlib
import socket
import subprocess
import sys
import tempfile
import time
import unittest

from station import JsonClient, ROOT, Station


def generated_feed():
    """The Python classes of proto/feed.proto, as a client's author would make them."""
    folder = tempfile.mkdtemp(prefix="kedge-proto-")
    subprocess.run(["protoc", f"--proto_path={ROOT / 'proto'}", f"--python_out={folder}", "feed.proto"], check=True)
    spec = importlib.util.spec_from_file_location("feed_pb2", pathlib.Path(folder) / "feed_pb2.py")
    module = importlib.util.module_from_spec(spec)
    sys.modules["feed_pb2"] = module
    spec.loader.exec_module(module)
    return module


def varint(value):
    out = bytearray()
    while value > 0x7F:
        out.append(value & 0x7F | 0x80)
        value >>= 7
    out.append(value)
    return bytes(out)


def read_delimited(file, message_class):
    length = shift = 0
    while True:
        byte = file.read(1)
        if not byte:
            return None
        length |= (byte[0] & 0x7F) << shift
        shift += 7
        if byte[0] < 0x80:
            break
    return message_class.FromString(file.read(length))


class Subscribers(unittest.TestCase):
    def test_a_json_subscriber_gets_the_canonical_stream(self):
        with Station(tags=2) as station:
            client = JsonClient(station.tcp_port)
            greeting = client.read()["greeting"]
            self.assertEqual(greeting["site"], "nursery")
            self.assertEqual(greeting["tags"], ["cart-1", "cart-2"])
            self.assertIn("collision", greeting["caution"])
            simulator = station.simulate("--seconds", 6, wait=False)
            received = []
            end = time.monotonic() + 5
            while time.monotonic() < end:
                received.append(client.file.readline())
            simulator.wait(timeout=20)
            client.close()
            self.assertEqual(station.stop(), 0)
            after = int(greeting["after_sequence"])
            numbered = [line for line in received if int(json.loads(line)["sequence"]) > after]
            canonical = station.stream.read_bytes().splitlines(keepends=True)
            self.assertGreater(len(numbered), 80)
            first = int(json.loads(numbered[0])["sequence"])
            self.assertEqual(numbered, canonical[first - 1:first - 1 + len(numbered)])

    def test_a_delimited_subscriber_over_the_unix_socket(self):
        feed = generated_feed()
        with Station(tags=1) as station:
            station.simulate("--seconds", 3, wait=False)
            client = socket.socket(socket.AF_UNIX)
            client.settimeout(10)
            client.connect(str(station.unix))
            request = feed.ClientMessage()
            request.subscribe.subjects.append(feed.Subject.position)
            body = request.SerializeToString()
            client.sendall(varint(len(body)) + body)
            file = client.makefile("rb")
            self.assertEqual(read_delimited(file, feed.Message).greeting.site, "nursery")
            for _ in range(10):
                message = read_delimited(file, feed.Message)
                self.assertEqual(message.WhichOneof("body"), "position")
            self.assertEqual(message.position.tag, "cart-1")
            client.close()

    def test_only_the_tags_asked_for(self):
        with Station(tags=2) as station:
            station.simulate("--seconds", 4, wait=False)
            client = JsonClient(station.tcp_port, {"tags": ["cart-2"], "subjects": ["position"]})
            client.read()
            self.assertEqual({client.read()["position"]["tag"] for _ in range(20)}, {"cart-2"})
            client.close()

    def test_a_tag_that_does_not_exist_is_refused_in_words(self):
        with Station(tags=1) as station:
            client = JsonClient(station.tcp_port, {"tags": ["cart-9"]})
            answer = client.read()
            self.assertIn("cart-9", answer["error"])
            self.assertIsNone(client.read())
            client.close()

    def test_bad_clients_are_never_felt(self):
        with Station(tags=1) as station:
            simulator = station.simulate("--seconds", 8, wait=False)
            good = JsonClient(station.tcp_port, {"subjects": ["pulse"]})
            good.read()
            address = ("127.0.0.1", station.tcp_port)
            for garbage in (b"\x00" * 100, b"GET / HTTP/1.1\r\n\r\n", b'{"subscribe":', b"{]\n", b"\xff" * 5000):
                with socket.create_connection(address, timeout=5) as bad:
                    bad.sendall(garbage)
            with socket.create_connection(address, timeout=5) as bad:
                try:
                    for _ in range(160):
                        bad.sendall(b"x" * 65536)
                except OSError:
                    pass
            silent = [socket.create_connection(address, timeout=5) for _ in range(50)]
            stuck = JsonClient(station.tcp_port)  # never reads
            pulses = [int(good.read()["pulse"]["time_ns"]) for _ in range(4)]
            gaps = [(b - a) / 1e9 for a, b in zip(pulses, pulses[1:])]
            self.assertLess(max(gaps), 1.2, gaps)
            for connection in silent:
                connection.close()
            stuck.close()
            good.close()
            simulator.wait(timeout=20)
            self.assertEqual(station.stop(), 0)


if __name__ == "__main__":
    unittest.main()

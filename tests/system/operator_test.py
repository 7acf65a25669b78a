"""An operator's word reaches the running daemon, is a record like any other, and replays."""

import json
import socket
import time
import unittest

from station import Station, run, tool, wait_for


def ask(path, line):
    with socket.socket(socket.AF_UNIX) as client:
        client.settimeout(5)
        client.connect(str(path))
        client.sendall(line.encode() + b"\n")
        return json.loads(client.makefile().readline())


class Operator(unittest.TestCase):
    def test_a_correction_moves_the_tag_and_replays(self):
        with Station(tags=1) as station:
            simulator = station.simulate("--seconds", 8, wait=False)
            wait_for(lambda: "cart-1: " in station.log(), 8, "the tag is heard")
            time.sleep(3)
            # Told to stand on the other side of the mast: the position follows the operator's word.
            done = run(tool("tell"), "--control", station.control, "cart-1", "--at", "-22,-8", "--sigma", "0.3",
                       "--heading", "270")
            self.assertEqual(done.returncode, 0, done.stderr)
            simulator.wait(timeout=20)
            self.assertEqual(station.stop(), 0)
            positions = [m["position"] for m in station.messages() if m.get("position", {}).get("east_m") is not None]
            jump = max(abs(b["east_m"] - a["east_m"]) for a, b in zip(positions, positions[1:]))
            self.assertGreater(jump, 20)
            self.assertEqual(station.replay(), station.stream.read_bytes())

    def test_a_place_by_name(self):
        with Station(tags=1) as station:
            done = run(tool("tell"), "--control", station.control, "--config", station.config, "cart-1", "--place", "dock")
            self.assertEqual(done.returncode, 0, done.stderr)
            wait_for(lambda: "correction for tag cart-1" in station.log(), 5, "the daemon logs it")
            self.assertIn("north_m: -40", station.log())

    def test_words_that_make_no_sense_are_refused_in_words(self):
        with Station(tags=1) as station:
            for line, part in (('{"correction":{"tag":"cart-9","heading_deg":90}}', "cart-9"),
                               ('{"correction":{"tag":"cart-1"}}', "heading"),
                               ('{"correction":{"tag":"cart-1","east_m":1}}', "north"),
                               ('nonsense', "")):
                answer = ask(station.control, line)
                self.assertIn(part, answer["error"])
            done = run(tool("tell"), "--control", station.control, "cart-9", "--heading", "90")
            self.assertEqual(done.returncode, 1)
            self.assertIn("cart-9", done.stderr)


if __name__ == "__main__":
    unittest.main()

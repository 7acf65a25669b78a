"""What the daemon published live and what the replay of its capture gives are the same bytes."""

import json
import os
import pty
import random
import signal
import socket
import time
import tty
import unittest

from station import Station, run, tool, wait_for


class LiveEqualsReplay(unittest.TestCase):
    def check(self, station, least_messages):
        live = station.stream.read_bytes()
        self.assertGreater(live.count(b"\n"), least_messages)
        first = station.replay()
        second = station.replay()
        self.assertEqual(first, second)
        self.assertTrue(first == live, "the replay differs from the live stream")

    def test_under_load_loss_and_restarts(self):
        with Station(tags=4) as station:
            # Everything a link can do to packets, at once; devices restart in mid-run and their clocks wrap.
            station.simulate("--seconds", 20, "--pty", station.serial, "--serial-tag", "cart-3", "--loss", "0.1",
                             "--duplicates", "0.05", "--reorder", "0.1", "--jitter-ms", "20", "--restart-after", "9",
                             "--wrap-after", "5")
            self.assertEqual(station.stop(), 0)
            self.check(station, 1000)
            messages = station.messages()
            self.assertEqual([int(m["sequence"]) for m in messages], list(range(1, len(messages) + 1)))
            located = {m["position"]["tag"] for m in messages if m.get("position", {}).get("east_m") is not None}
            self.assertEqual(located, {"cart-1", "cart-2", "cart-3", "cart-4"})

    def test_with_noise_on_every_link(self):
        seed = 5
        chance = random.Random(seed)
        with Station(tags=1) as station:
            master, slave = pty.openpty()
            tty.setraw(slave)
            os.symlink(os.ttyname(slave), station.serial)
            simulator = station.simulate("--seconds", 6, wait=False)
            wait_for(lambda: "link line: open" in station.log(), 8, "the serial link opens")
            with socket.socket(socket.AF_INET, socket.SOCK_DGRAM) as sender:
                for _ in range(300):
                    noise = chance.randbytes(chance.randrange(1, 400))
                    sender.sendto(noise, ("127.0.0.1", station.udp_port))
                    os.write(master, noise[:200])
            simulator.wait(timeout=30)
            self.assertEqual(station.stop(), 0)
            self.check(station, 100)
            os.close(master)
            os.close(slave)

    def test_a_killed_daemon_leaves_a_capture_that_replays(self):
        with Station(tags=1) as station:
            station.simulate("--seconds", 5)
            station.stop(signal.SIGKILL)
            replayed = station.replay().splitlines()
            # At most the bounded flush of one second is missing at the end.
            last = json.loads(replayed[-1])
            first = json.loads(replayed[0])
            times = [next(iter(v for k, v in m.items() if k != "sequence")) for m in (first, last)]
            self.assertGreater(int(times[1]["time_ns"]) - int(times[0]["time_ns"]), 3_500_000_000)

    def test_replay_keeps_the_pace_it_is_given(self):
        with Station(tags=1) as station:
            station.simulate("--seconds", 6)
            self.assertEqual(station.stop(), 0)
            begun = time.monotonic()
            done = run(tool("replay"), station.capture(), "--speed", "4", "--out", station.folder / "paced.jsonl")
            took = time.monotonic() - begun
            self.assertEqual(done.returncode, 0, done.stderr)
            self.assertGreater(took, 1.2)
            self.assertEqual((station.folder / "paced.jsonl").read_bytes(), station.stream.read_bytes())

    def test_another_configuration_gives_another_result(self):
        with Station(tags=1) as station:
            station.simulate("--seconds", 6)
            self.assertEqual(station.stop(), 0)
            other = station.folder / "other.txtpb"
            other.write_text(station.config.read_text() + "\nmethod: plain\n")
            rehearsed = station.replay(station.capture(), "--config", other)
            self.assertNotEqual(rehearsed, station.stream.read_bytes())


if __name__ == "__main__":
    unittest.main()

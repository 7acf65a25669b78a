"""A serial cable pulled in mid-run: the link says so, comes back by itself, and the tag goes on."""

import os
import unittest

from station import Station, count, wait_for


class SerialCable(unittest.TestCase):
    def test_pulled_and_plugged_in_again(self):
        with Station(tags=1) as station:
            self.assertIn("link line: down", station.log())
            first = station.simulate("--seconds", 60, "--pty", station.serial, "--serial-tag", "cart-1", wait=False)
            wait_for(lambda: count("link line: open", station.log()) == 1, 8, "the link opens")
            wait_for(lambda: "cart-1: " in station.log(), 8, "the tag is heard")
            first.kill()  # the pseudo-terminal goes away with its owner
            first.wait()
            wait_for(lambda: count("link line: down", station.log()) == 2, 5, "the link says it is down")
            if os.path.islink(station.serial):
                os.unlink(station.serial)
            second = station.simulate("--seconds", 60, "--pty", station.serial, "--serial-tag", "cart-1", wait=False)
            wait_for(lambda: count("link line: open", station.log()) == 2, 10, "the link opens again")
            heard = len([m for m in station.messages() if "position" in m])
            wait_for(lambda: len([m for m in station.messages() if "position" in m]) > heard + 10, 10,
                     "positions go on")
            second.kill()
            second.wait()
            self.assertEqual(station.stop(), 0)
            self.assertEqual(station.replay(), station.stream.read_bytes())
            downs = [m for m in station.messages() if "link_down" in
                     [c["concern"] for c in m.get("health", {}).get("concerns", [])]]
            self.assertTrue(downs)


if __name__ == "__main__":
    unittest.main()

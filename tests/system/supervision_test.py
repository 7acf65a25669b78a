"""Under supervision: ready only when the ports are open, alive while it runs, a clean end on SIGTERM."""

import os
import re
import resource
import shutil
import signal
import socket
import subprocess
import tempfile
import time
import unittest

from station import BIN, ROOT, JsonClient, Station, run


class Supervision(unittest.TestCase):
    def test_ready_watchdog_and_stopping(self):
        station = Station()
        path = station.folder / "notify.sock"
        supervisor = socket.socket(socket.AF_UNIX, socket.SOCK_DGRAM)
        supervisor.bind(str(path))
        supervisor.settimeout(10)
        try:
            environment = dict(os.environ, NOTIFY_SOCKET=str(path), WATCHDOG_USEC="1000000")
            station.start(env=environment)
            said = supervisor.recv(4096).decode()
            self.assertIn("READY=1", said)
            self.assertIn("nursery", said)
            # Ready means that a client can come at once.
            socket.create_connection(("127.0.0.1", station.tcp_port), timeout=1).close()
            begun = time.monotonic()
            for _ in range(3):
                self.assertIn("WATCHDOG=1", supervisor.recv(4096).decode())
            self.assertLess(time.monotonic() - begun, 2.0)
            station.process.send_signal(signal.SIGTERM)
            heard = ""
            while "STOPPING=1" not in heard:
                heard = supervisor.recv(4096).decode()
            self.assertEqual(station.process.wait(timeout=10), 0)
            station.process = None
        finally:
            supervisor.close()
            station.__exit__()

    def test_the_capture_is_complete_after_sigint_too(self):
        with Station() as station:
            station.simulate("--seconds", 3)
            self.assertEqual(station.stop(signal.SIGINT), 0)
            self.assertEqual(station.replay(), station.stream.read_bytes())

    def test_a_full_disk_is_told_and_tracking_goes_on(self):
        def small_disk():
            # The same refusal as a full disk's: no file may grow beyond 150 kB.
            signal.signal(signal.SIGXFSZ, signal.SIG_IGN)
            resource.setrlimit(resource.RLIMIT_FSIZE, (150_000, 150_000))

        station = Station()
        try:
            station.start("--log-level", "info", preexec_fn=small_disk)
            simulator = station.simulate("--seconds", 25, wait=False)
            client = JsonClient(station.tcp_port, timeout=25)
            client.read_until(lambda m: "capture_failing" in [c["concern"] for c in m.get("health", {}).get("concerns", [])],
                              seconds=25)
            client.read_until(lambda m: m.get("position", {}).get("standing") == "settled")
            client.close()
            simulator.wait(timeout=30)
            self.assertEqual(station.stop(), 1)
            log = station.log()
            self.assertEqual(log.count("tracking goes on without it"), 1, log)
            self.assertNotIn("writing again", log)
            # What was written before is whole.
            self.assertGreater(len(station.replay().splitlines()), 50)
        finally:
            station.__exit__()

    @unittest.skipUnless(shutil.which("systemd-analyze"), "skipped: no systemd-analyze")
    def test_the_unit_file_is_good(self):
        with tempfile.TemporaryDirectory() as folder:
            unit = (ROOT / "systemd" / "kedged.service").read_text()
            # Where it will be installed is known to the package alone; check against the program just built.
            unit = re.sub(r"(ExecStart\w*=)kedged", rf"\g<1>{BIN / 'daemon' / 'kedged'}", unit)
            path = os.path.join(folder, "kedged.service")
            with open(path, "w", encoding="utf-8") as out:
                out.write(unit)
            done = subprocess.run(["systemd-analyze", "verify", path], text=True, capture_output=True, check=False)
            self.assertEqual(done.returncode, 0, done.stderr)
            self.assertEqual(done.stderr.strip(), "")
            done = run("systemd-analyze", "security", "--offline=true", path)
            exposure = float(re.search(r"exposure level.*?: ([\d.]+)", done.stdout).group(1))
            self.assertLess(exposure, 2.5)


if __name__ == "__main__":
    unittest.main()

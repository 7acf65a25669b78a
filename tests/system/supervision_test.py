"""Under supervision: ready only when the ports are open, alive while it runs, a clean end on SIGTERM."""

import os
import re
import shutil
import signal
import socket
import subprocess
import tempfile
import time
import unittest

from station import BIN, ROOT, Station, run


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

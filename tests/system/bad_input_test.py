"""Wrong input: each error says what, where, and what would be right; exit code 2 for usage and configuration."""

import pathlib
import shutil
import socket
import tempfile
import unittest

from station import KEDGED, ROOT, Station, run, tool


class BadInput(unittest.TestCase):
    def setUp(self):
        self.folder = pathlib.Path(tempfile.mkdtemp(prefix="kedge-test-"))

    def tearDown(self):
        shutil.rmtree(self.folder)

    def write(self, text):
        path = self.folder / "site.txtpb"
        path.write_text(text)
        return path

    def test_usage(self):
        for command in ([KEDGED], [KEDGED, "--nonsense", "x"], [KEDGED, "a", "b"], [tool("replay")],
                        [tool("simulate")], [tool("evaluate")], [tool("convert")], [tool("tell")],
                        [tool("lookout"), "--nonsense"]):
            done = run(*command)
            self.assertEqual(done.returncode, 2, command)
            self.assertTrue(done.stderr.strip(), command)

    def test_help_and_version(self):
        for command in (KEDGED, *(tool(n) for n in ("replay", "simulate", "evaluate", "convert", "tell", "lookout"))):
            self.assertEqual(run(command, "--help").returncode, 0, command)
            self.assertRegex(run(command, "--version").stdout, r"^\d+\.\d+\.\d+\n$")

    def test_every_shipped_configuration_is_good(self):
        for name in ("minimal", "full", "demo"):
            done = run(KEDGED, "--check", ROOT / "config" / f"{name}.txtpb")
            self.assertEqual(done.returncode, 0, done.stderr)

    def test_all_errors_of_a_configuration_at_once_with_their_places(self):
        path = self.write('site { name: "nursery" }\n'
                          'anchors { name: "mast" anchor_id: 1 east_m: 0 north_m: 0 }\n'
                          'tags { name: "cart-1" device_id: 11 }\n'
                          'tags { name: "cart-1" device_id: 12 }\n'
                          'links { name: "radio" udp { port: 70000 } }\n')
        done = run(KEDGED, "--check", path)
        self.assertEqual(done.returncode, 2)
        lines = done.stderr.splitlines()
        self.assertTrue(any(line.startswith(f"{path}:4:") and "cart-1" in line for line in lines), done.stderr)
        self.assertTrue(any(line.startswith(f"{path}:5:") and "70000" in line for line in lines), done.stderr)

    def test_a_syntax_error_has_line_and_column(self):
        done = run(KEDGED, self.write('site { name: "nursery"\n  color: 3 }\n'))
        self.assertEqual(done.returncode, 2)
        self.assertRegex(done.stderr, r"site\.txtpb:2:\d+: .*color")

    def test_a_missing_file(self):
        done = run(KEDGED, self.folder / "none.txtpb")
        self.assertEqual(done.returncode, 2)
        self.assertIn("none.txtpb", done.stderr)

    def test_printing_gives_a_configuration_that_prints_the_same(self):
        first = run(KEDGED, "--print", ROOT / "config" / "demo.txtpb").stdout
        second = run(KEDGED, "--print", self.write(first)).stdout
        self.assertEqual(first, second)
        self.assertIn("delay_max_s", first)

    def test_a_port_in_use(self):
        with Station() as station:
            done = run(KEDGED, station.config)
            self.assertEqual(done.returncode, 1)
            self.assertIn(str(station.udp_port), done.stderr)

    def test_replay_of_what_is_no_capture(self):
        for content, part in ((b"", "empty"), (b"hello, this is no capture at all" * 10, "a text file, not a pcapng file"),
                              (b"\xd4\xc3\xb2\xa1" + b"\x00" * 40, "pcap")):
            path = self.folder / "x.pcapng"
            path.write_bytes(content)
            done = run(tool("replay"), path)
            self.assertNotEqual(done.returncode, 0)
            self.assertIn(part, done.stderr)
        done = run(tool("replay"), self.folder / "none.pcapng")
        self.assertEqual(done.returncode, 2)
        self.assertIn("none.pcapng", done.stderr)

    def test_a_cut_capture_replays_up_to_the_cut_and_says_so(self):
        with Station() as station:
            station.simulate("--seconds", 4)
            self.assertEqual(station.stop(), 0)
            whole = station.capture().read_bytes()
            cut = self.folder / "cut.pcapng"
            cut.write_bytes(whole[:len(whole) * 2 // 3 + 1])
            done = run(tool("replay"), cut, "--out", self.folder / "cut.jsonl")
            self.assertEqual(done.returncode, 0, done.stderr)
            self.assertRegex(done.stderr, r"byte \d+: \d+ bytes lost")
            replayed = (self.folder / "cut.jsonl").read_bytes().splitlines()
            live = station.stream.read_bytes().splitlines()
            # The same up to the cut; behind it the station's health says that the capture is torn.
            self.assertGreater(len(replayed), 20)
            self.assertEqual(replayed, live[:len(replayed)])

    def test_a_replay_never_overwrites_its_capture(self):
        with Station() as station:
            station.simulate("--seconds", 3)
            self.assertEqual(station.stop(), 0)
            before = station.capture().read_bytes()
            done = run(tool("replay"), station.capture(), "--out", station.capture())
            self.assertEqual(done.returncode, 2)
            self.assertIn("is the capture itself", done.stderr)
            self.assertEqual(station.capture().read_bytes(), before)

    def test_a_socket_path_that_someone_listens_on_is_left_alone(self):
        with Station() as station:
            other = self.folder / "taken.sock"
            with socket.socket(socket.AF_UNIX) as holder:
                holder.bind(str(other))
                holder.listen()
                station.stop()
                text = station.config.read_text().replace(str(station.unix), str(other))
                done = run(KEDGED, self.write(text))
                self.assertEqual(done.returncode, 1)
                self.assertIn("taken.sock", done.stderr)


if __name__ == "__main__":
    unittest.main()

"""A station in a folder of its own: the real daemon with a configuration, and the tools around it."""

import json
import os
import pathlib
import re
import shutil
import signal
import socket
import subprocess
import tempfile
import time

BIN = pathlib.Path(os.environ["KEDGE_BIN"])
KEDGED = BIN / "daemon" / "kedged"
ROOT = pathlib.Path(__file__).resolve().parents[2]


def tool(name):
    return BIN / "tools" / f"kedge-{name}"


def run(*command, timeout=120, **more):
    """Runs to the end; the result has returncode, stdout and stderr as text."""
    return subprocess.run([str(c) for c in command], timeout=timeout, text=True, capture_output=True, **more)


def free_port(kind=socket.SOCK_STREAM):
    with socket.socket(socket.AF_INET, kind) as probe:
        probe.bind(("127.0.0.1", 0))
        return probe.getsockname()[1]


def wait_for(condition, seconds, what):
    end = time.monotonic() + seconds
    while time.monotonic() < end:
        value = condition()
        if value:
            return value
        time.sleep(0.05)
    raise AssertionError(f"not within {seconds} s: {what}")


class Station:
    """Context manager: starts kedged, ends it with SIGTERM, keeps its log and canonical stream."""

    def __init__(self, tags=1, more=""):
        self.folder = pathlib.Path(tempfile.mkdtemp(prefix="kedge-test-"))
        self.udp_port = free_port(socket.SOCK_DGRAM)
        self.tcp_port = free_port()
        self.serial = self.folder / "serial"
        self.control = self.folder / "control.sock"
        self.unix = self.folder / "feed.sock"
        self.stream = self.folder / "stream.jsonl"
        self.config = self.folder / "site.txtpb"
        self.process = None
        self.simulators = []
        self.log_path = self.folder / "kedged.log"
        self.config.write_text(self.configuration(tags) + more)

    def configuration(self, tags):
        starts = [(22, 8, 90), (12, -40, 0), (-46, 10, 90), (-14, -38, 0)]
        text = f'''
site {{ name: "nursery" declination_deg: 3
  places {{ name: "dock" east_m: 12 north_m: -40 }} }}
anchors {{ name: "mast" anchor_id: 1 east_m: 0 north_m: 0 up_m: 3 }}
links {{ name: "radio" udp {{ port: {self.udp_port} }} }}
links {{ name: "line" serial {{ device: "{self.serial}" }} }}
feed {{ tcp: "127.0.0.1:{self.tcp_port}" unix: "{self.unix}" }}
capture {{ folder: "{self.folder}/captures" }}
control {{ unix: "{self.control}" }}
'''
        for i, (east, north, heading) in enumerate(starts[:tags]):
            text += f'''
tags {{ name: "cart-{i + 1}" device_id: {11 + i} profile: wheeled magnetometer {{ hard_iron_ut: [0, 0, 0] }}
  start {{ east_m: {east} north_m: {north} position_sigma_m: 0.5 heading_deg: {heading} heading_sigma_deg: 5 }} }}
'''
        return text

    def start(self, *options, **more):
        with self.log_path.open("a", encoding="utf-8") as log:
            self.process = subprocess.Popen(
                [str(KEDGED), str(self.config), *(options or ("--stream", str(self.stream)))], stderr=log, **more)
        wait_for(lambda: " ready: " in self.log() or self.process.poll() is not None, 10, "the daemon is ready")
        assert self.process.poll() is None, self.log()
        return self

    def stop(self, signal_number=signal.SIGTERM):
        if self.process is None:
            return None
        self.process.send_signal(signal_number)
        code = self.process.wait(timeout=15)
        self.process = None
        return code

    def __enter__(self):
        return self.start()

    def __exit__(self, *_):
        self.stop(signal.SIGKILL)
        for simulator in self.simulators:
            simulator.kill()
            simulator.wait()
        shutil.rmtree(self.folder, ignore_errors=True)

    def log(self):
        return self.log_path.read_text() if self.log_path.exists() else ""

    def simulate(self, *options, wait=True):
        command = [str(tool("simulate")), "--site", str(self.config), "--udp", f"127.0.0.1:{self.udp_port}", *map(str, options)]
        if wait:
            done = run(*command)
            assert done.returncode == 0, done.stderr
            return done
        self.simulators.append(subprocess.Popen(command, stderr=subprocess.DEVNULL))
        return self.simulators[-1]

    def capture(self):
        (path,) = (self.folder / "captures").glob("*.pcapng")
        return path

    def replay(self, capture=None, *options):
        out = self.folder / "replay.jsonl"
        done = run(tool("replay"), capture or self.capture(), "--out", out, *options)
        assert done.returncode == 0, done.stderr
        return out.read_bytes()

    def messages(self):
        """Of the canonical stream so far; its last line may still be in the writing."""
        return [json.loads(line) for line in self.stream.read_text().splitlines(keepends=True) if line.endswith("\n")]


class JsonClient:
    """A subscriber that speaks JSON lines."""

    def __init__(self, port, subscribe=None, timeout=10):
        self.socket = socket.create_connection(("127.0.0.1", port), timeout=timeout)
        self.file = self.socket.makefile("rb")
        self.socket.sendall(json.dumps({"subscribe": subscribe or {}}).encode() + b"\n")

    def read(self):
        line = self.file.readline()
        return json.loads(line) if line else None

    def read_until(self, condition, seconds=10):
        end = time.monotonic() + seconds
        while time.monotonic() < end:
            message = self.read()
            if message is None:
                raise AssertionError("the stream ended")
            if condition(message):
                return message
        raise AssertionError(f"no such message within {seconds} s")

    def close(self):
        self.file.close()
        self.socket.close()


def count(pattern, text):
    return len(re.findall(pattern, text))

"""The house keeps its order: arrows run downwards, and pure rooms stay pure.

Reads the includes of every source file. A room may include itself and the rooms below it; a pure room
may not reach for sockets, threads, files, clocks or chance.
"""

import pathlib
import re
import unittest

ROOT = pathlib.Path(__file__).resolve().parents[2]
DAEMON = ROOT / "daemon"

BELOW = {
    "core": set(),
    "wire": {"core"},
    "clock": {"core"},
    "fusion": {"core"},
    "pipeline": {"core", "wire", "clock", "fusion"},
    "feed": {"core", "wire", "fusion", "pipeline"},
    "capture": {"core"},
    "config": {"core", "fusion", "pipeline"},
    "io": {"core", "feed", "capture", "config", "pipeline"},
    "app": {"core", "wire", "clock", "fusion", "pipeline", "feed", "capture", "config", "io"},
}
PROTOS = {
    "wire": {"packets"},
    "pipeline": {"station"},
    "feed": {"feed"},
    "config": {"config"},
    "io": {"station", "feed"},
    "app": {"station", "feed", "config"},
}
PURE = ["core", "wire", "clock", "fusion", "pipeline", "feed"]
IMPURE_HEADERS = re.compile(
    r"asio|spdlog|thread|mutex|atomic|condition_variable|future|fstream|iostream|filesystem|chrono|random|ctime"
    r"|sys/|unistd|fcntl|netinet|arpa/|time\.h")
IMPURE_WORDS = re.compile(r"\bnow\(\)|random_device|\bgetenv\b|\bfopen\b|\bthread_local\b")
# The two places of the capture room that touch files.
CAPTURE_FILES = {"file_sink.h", "file_sink.cpp", "file_source.h", "file_source.cpp"}

INCLUDE = re.compile(r'^\s*#\s*include\s*([<"])([^>"]+)[>"]', re.MULTILINE)
COMMENT = re.compile(r"//[^\n]*|/\*.*?\*/", re.DOTALL)


def sources(room):
    return sorted(p for p in (DAEMON / room).rglob("*") if p.suffix in (".h", ".cpp"))


class Rooms(unittest.TestCase):
    def test_every_room_is_known(self):
        rooms = {p.name for p in DAEMON.iterdir() if p.is_dir()}
        self.assertEqual(rooms, set(BELOW))

    def test_arrows_run_downwards(self):
        wrong = []
        for room, below in BELOW.items():
            for path in sources(room):
                for kind, name in INCLUDE.findall(path.read_text()):
                    if kind != '"':
                        continue
                    first = name.split("/")[0]
                    if first == "proto":
                        stem = name.split("/")[1].split(".")[0]
                        if stem not in PROTOS.get(room, set()):
                            wrong.append(f"{path.relative_to(ROOT)} includes {name}")
                    elif first not in below | {room}:
                        wrong.append(f"{path.relative_to(ROOT)} includes {name}")
        self.assertEqual(wrong, [])

    def test_pure_rooms_are_pure(self):
        wrong = []
        for room in PURE + ["capture"]:
            for path in sources(room):
                if room == "capture" and path.name in CAPTURE_FILES:
                    continue
                text = path.read_text()
                for kind, name in INCLUDE.findall(text):
                    if kind == "<" and IMPURE_HEADERS.search(name):
                        wrong.append(f"{path.relative_to(ROOT)} includes <{name}>")
                for word in IMPURE_WORDS.findall(COMMENT.sub("", text)):
                    wrong.append(f"{path.relative_to(ROOT)} uses {word}")
        self.assertEqual(wrong, [])

    def test_headers_open_with_their_reason(self):
        wrong = [str(p.relative_to(ROOT)) for room in BELOW for p in sources(room)
                 if p.suffix == ".h" and not p.read_text().startswith("//")]
        self.assertEqual(wrong, [])

    def test_no_file_asks_to_be_split(self):
        wrong = []
        for folder in ("daemon", "tools", "tests"):
            for path in sorted((ROOT / folder).rglob("*")):
                if path.suffix in (".h", ".cpp", ".py") and len(path.read_text().splitlines()) > 500:
                    wrong.append(str(path.relative_to(ROOT)))
        self.assertEqual(wrong, [])


class Checker(unittest.TestCase):
    """The checks above can fail."""

    def test_an_include_of_asio_is_seen(self):
        (kind, name), = INCLUDE.findall('#include <asio/io_context.hpp>\n')
        self.assertTrue(kind == "<" and IMPURE_HEADERS.search(name))

    def test_asking_the_clock_is_seen(self):
        self.assertTrue(IMPURE_WORDS.search("auto t = std::chrono::steady_clock::now();"))
        self.assertFalse(IMPURE_WORDS.search(COMMENT.sub("", "// the core never calls now()\n")))


if __name__ == "__main__":
    unittest.main()

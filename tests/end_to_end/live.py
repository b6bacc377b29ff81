"""What the scripts that test a running nightweigh share: starting and ending it, feeding it, asking it.

Everything happens on loopback and free ports (port 0, read back from endpoints.json), in folders under a
temporary one. Only processes that were started here are ended, each by its id.
"""
import hashlib
import http.client
import json
import os
import signal
import socket
import subprocess
import time
from datetime import date, timedelta

START_LIMIT_S = 60
ANSWER_LIMIT_S = 300


def refuse_constant(name):
    raise ValueError(f"JSON holds {name}")


def read_json(text):
    """JSON, strictly: NaN and Infinity, which Python would let pass, raise ValueError; so do repeated keys."""

    def once(pairs):
        out = dict(pairs)
        if len(out) != len(pairs):
            raise ValueError("a key stands twice in one object")
        return out

    return json.loads(text, parse_constant=refuse_constant, object_pairs_hook=once)


class Checks:
    """Counts what was checked; the exit code says whether all of it held."""

    def __init__(self):
        self.done = 0
        self.failed = []

    def that(self, held, what, detail=""):
        self.done += 1
        if not held:
            self.failed.append(what)
            print(f"FAILED {what}" + (f"\n       {detail}" if detail != "" else ""), flush=True)
        return bool(held)

    def equal(self, found, expected, what):
        return self.that(found == expected, what, f"found    {found!r}\n       expected {expected!r}")

    def finish(self):
        print(f"{self.done} checks, {len(self.failed)} failed", flush=True)
        return 1 if self.failed else 0


def weekdays(first, count):
    """ISO dates of `count` weekdays from `first` on."""
    day = date.fromisoformat(first)
    out = []
    while len(out) < count:
        if day.weekday() < 5:
            out.append(day.isoformat())
        day += timedelta(days=1)
    return out


def digest_of(data):
    return hashlib.sha256(data).hexdigest()


def run(program, *arguments, limit_s=ANSWER_LIMIT_S):
    return subprocess.run(
        [program, *map(str, arguments)], capture_output=True, text=True, timeout=limit_s, stdin=subprocess.DEVNULL
    )


class Feeder:
    """One connection to the feed socket."""

    def __init__(self, endpoint, limit_s=ANSWER_LIMIT_S):
        if endpoint.startswith("unix:"):
            self.socket = socket.socket(socket.AF_UNIX)
            self.socket.settimeout(limit_s)
            self.socket.connect(endpoint[len("unix:"):])
        else:
            host, port = endpoint.rsplit(":", 1)
            self.socket = socket.create_connection((host.strip("[]"), int(port)), timeout=limit_s)
        self.reader = self.socket.makefile("rb")

    def send(self, data):
        """Bytes of one line, without its newline. Returns the acknowledgement."""
        if isinstance(data, str):
            data = data.encode()
        self.socket.sendall(data + b"\n")
        return self.answer()

    def answer(self):
        line = self.reader.readline()
        if not line.endswith(b"\n"):
            raise ConnectionError("the connection ended before the acknowledgement")
        return read_json(line)

    def close(self):
        self.reader.close()
        self.socket.close()

    def __enter__(self):
        return self

    def __exit__(self, *_):
        self.close()


class Answer:
    def __init__(self, status, headers, body):
        self.status, self.headers, self.body = status, headers, body

    def json(self):
        return read_json(self.body)


class Service:
    """A process of the program that serves `settings` (a path). data_dir: where the settings put it."""

    def __init__(self, program, settings, data_dir):
        self.program, self.settings, self.data_dir = program, str(settings), str(data_dir)
        self.process = None
        self.connection = None
        self.log_path = self.settings + ".log"

    def spawn(self):
        """Starts the process without waiting for it to be ready."""
        # A killed service leaves its file behind; the new one's must not be mixed up with it.
        try:
            os.remove(os.path.join(self.data_dir, "endpoints.json"))
        except FileNotFoundError:
            pass
        self.drop_connection()
        log = open(self.log_path, "ab")
        self.process = subprocess.Popen(
            [self.program, "serve", "--settings", self.settings],
            stdout=log, stderr=subprocess.STDOUT, stdin=subprocess.DEVNULL,
        )
        log.close()
        return self

    def start(self):
        self.spawn()
        deadline = time.monotonic() + START_LIMIT_S
        while time.monotonic() < deadline:
            if self.process.poll() is not None:
                raise RuntimeError(f"the service ended with {self.process.returncode}:\n{self.log()[-2000:]}")
            try:
                self.endpoints = self.read_endpoints()
                if self.get("/readyz").status == 200:
                    return self
            except (OSError, ValueError, http.client.HTTPException):
                self.drop_connection()
            time.sleep(0.01)
        raise RuntimeError(f"the service was not ready within {START_LIMIT_S} s:\n{self.log()[-2000:]}")

    def read_endpoints(self):
        with open(os.path.join(self.data_dir, "endpoints.json"), encoding="utf-8") as file:
            return read_json(file.read())

    def log(self):
        with open(self.log_path, encoding="utf-8", errors="replace") as file:
            return file.read()

    def is_running(self):
        return self.process is not None and self.process.poll() is None

    def end(self, number=signal.SIGTERM, limit_s=30):
        """Sends the signal and waits. Returns (exit code, seconds)."""
        self.drop_connection()
        began = time.monotonic()
        self.process.send_signal(number)
        code = self.process.wait(timeout=limit_s)
        return code, time.monotonic() - began

    def __enter__(self):
        return self

    def __exit__(self, *_):
        self.drop_connection()
        if self.is_running():
            self.process.terminate()
            try:
                self.process.wait(timeout=20)
            except subprocess.TimeoutExpired:
                self.process.kill()
                self.process.wait()

    def drop_connection(self):
        if self.connection is not None:
            self.connection.close()
            self.connection = None

    def get(self, target, headers=None, limit_s=30):
        """GET over one kept connection; opened anew where the service has closed it."""
        for last_try in (False, True):
            fresh = self.connection is None
            if fresh:
                host, port = self.endpoints["http"].rsplit(":", 1)
                self.connection = http.client.HTTPConnection(host.strip("[]"), int(port), timeout=limit_s)
            try:
                self.connection.request("GET", target, headers=headers or {})
                answer = self.connection.getresponse()
                return Answer(answer.status, answer.headers, answer.read())
            except (http.client.RemoteDisconnected, BrokenPipeError, ConnectionResetError):
                self.drop_connection()
                if fresh or last_try:
                    raise
        raise AssertionError("not reached")

    def book(self, name):
        return self.get(f"/v1/books/{name}").json()

    def head(self, name):
        return self.book(name)["journal"]["head"]

    def night(self, name, day):
        answer = self.get(f"/v1/books/{name}/nights/{day}")
        if answer.status != 200:
            raise RuntimeError(f"no night {name} {day}: {answer.status} {answer.body[:300]!r}")
        return answer.json()

    def feeder(self, limit_s=ANSWER_LIMIT_S):
        return Feeder(self.endpoints["feed"], limit_s)

    def drop(self, name, data, moved_limit_s=60):
        """Renames a finished file into the drop folder and waits until it is gone from there. Returns
        ("accepted", "") or ("refused", text of the reason file)."""
        folder = os.path.join(self.data_dir, "drop")
        path = os.path.join(folder, name)
        put(path, data)
        deadline = time.monotonic() + moved_limit_s
        while os.path.exists(path):
            if time.monotonic() > deadline:
                return "left", ""
            time.sleep(0.005)
        if os.path.exists(os.path.join(folder, "accepted", name)):
            return "accepted", ""
        if not os.path.exists(os.path.join(folder, "refused", name)):
            return "lost", ""
        with open(os.path.join(folder, "refused", name + ".reason.txt"), encoding="utf-8") as file:
            return "refused", file.read()


def put(path, data):
    """Writes aside and renames. The modification time lies a little back, as that of a file copied by a
    data job does: the drop folder then need not look twice."""
    if isinstance(data, str):
        data = data.encode()
    aside = os.path.join(os.path.dirname(path), "." + os.path.basename(path))
    with open(aside, "wb") as file:
        file.write(data)
    past = time.time() - 10
    os.utime(aside, (past, past))
    os.rename(aside, path)


def closes_line(rows):
    """One line of JSON for the socket from dicts of columns."""
    return json.dumps({"closes": rows}, separators=(",", ":"))

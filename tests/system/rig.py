"""A stand for the real daemon: a folder of its own, a config, a gauge (pseudo-terminal, FIFO or unix
socket), the service manager's notify socket, and clients. Every wait has an end."""
import json
import os
import pty
import shutil
import signal
import socket
import subprocess
import tempfile
import time
import tty

WAIT_S = 30
WRAP = os.environ.get("WRAP", "").split()  # valgrind


def until(what, condition, seconds=WAIT_S):
    """Waits until condition() is true and returns its value; what it is goes into the failure."""
    end = time.monotonic() + seconds
    while time.monotonic() < end:
        value = condition()
        if value:
            return value
        time.sleep(0.01)
    raise AssertionError(f"not within {seconds} s: {what}")


class PtyGauge:
    """A pseudo-terminal behind a link that stays when the number changes, as a serial port's does."""

    def __init__(self, path):
        self.path = path
        self.master = None
        self.plug()

    def plug(self):
        self.master, slave = pty.openpty()
        tty.setraw(slave)
        os.set_blocking(self.master, False)
        name = os.ttyname(slave)
        if os.path.islink(self.path):
            os.unlink(self.path)
        os.symlink(name, self.path)
        self.slave = slave  # kept until unplugged, so that its settings stay
        return name

    def unplug(self):
        os.close(self.slave)
        os.close(self.master)
        self.master = None
        os.unlink(self.path)

    def send(self, data):
        data = data.encode() if isinstance(data, str) else data
        while data:
            try:
                data = data[os.write(self.master, data):]
            except BlockingIOError:
                time.sleep(0.002)

    def heard(self):
        try:
            return os.read(self.master, 65536).decode()
        except BlockingIOError:
            return ""

    def close(self):
        if self.master is not None:
            self.unplug()


class Rig:
    """One daemon. sections: {"gauge": {"clock": "gauge"}} is laid over the usual config."""

    def __init__(self, build, sections=None, gauge=True):
        self.brinkd = os.path.abspath(os.path.join(build, "brinkd"))
        self.folder = tempfile.mkdtemp(prefix="brink-")
        os.mkdir(self.at("run"))
        os.mkdir(self.at("lib"))
        self.t = 0.0
        self.process = None
        self.gauge = PtyGauge(self.at("gauge")) if gauge else None
        self.notify = socket.socket(socket.AF_UNIX, socket.SOCK_DGRAM)
        self.notify.bind(self.at("notify"))
        self.notify.settimeout(WAIT_S)
        self.notes = []
        self.configure(sections)

    def at(self, name):
        return os.path.join(self.folder, name)

    def configure(self, sections=None, text=None):
        config = {
            "unit": {"name": "heron", "typical": "1 W"},
            "gauge": {"kind": "stream", "device": self.at("gauge"), "clock": "gauge"},
            "pack main": {"cells": "nca-18650", "capacity": "2.9 Ah", "voltage": "v"},
            "ladder": {"confirm": "5 s", "grace": "10 s"},
            "stop": {"request": self.at("run/stop-request")},
            "files": {"status": self.at("run/status.json"), "socket": self.at("socket"),
                      "state": self.at("lib/state.json"), "cells": os.path.abspath("conf/cells")},
        }
        for section, keys in (sections or {}).items():
            config.setdefault(section, {}).update(keys)
        if text is None:
            text = "".join(f"[{name}]\n" + "".join(f"{k} = {v}\n" for k, v in keys.items())
                           for name, keys in config.items())
        with open(self.at("brink.conf"), "w") as f:
            f.write(text)

    def start(self, ready=True, environment=None):
        self.log = open(self.at("log"), "a+")
        env = {**os.environ, "NOTIFY_SOCKET": self.at("notify"), **(environment or {})}
        self.process = subprocess.Popen([*WRAP, self.brinkd, "--config", self.at("brink.conf")],
                                        env=env, stderr=self.log, stdin=subprocess.DEVNULL)
        if ready:
            self.note("READY=1")
        return self

    def note(self, beginning):
        """The next message to the service manager that begins so; those before are kept in notes."""
        end = time.monotonic() + WAIT_S
        while time.monotonic() < end:
            try:
                text = self.notify.recv(4096).decode()
            except socket.timeout:
                break
            self.notes.append(text)
            if text.startswith(beginning):
                return text
        raise AssertionError(f"no {beginning} among {self.notes}; log:\n{self.logged()}")

    def logged(self):
        with open(self.at("log")) as f:
            return f.read()

    def wait_logged(self, words, times=1):
        until(f'"{words}" in the log:\n{self.logged()}', lambda: self.logged().count(words) >= times)

    def feed(self, voltage, n=1, step_s=1.0, more=""):
        """n lines of the gauge's clock; small portions, as a gauge would send them."""
        for _ in range(n):
            self.t += step_s
            self.gauge.send(f"t={self.t:.3f} v={voltage:.4f} {more}\n")

    def read(self, name):
        """A JSON file; None when it is not there."""
        try:
            with open(self.at(name)) as f:
                return json.load(f)
        except FileNotFoundError:
            return None

    def status(self):
        return self.read("run/status.json")

    def wait_status(self, what, condition):
        def look():
            status = self.status()
            return status if status and condition(status) else None
        try:
            return until(what, look)
        except AssertionError as e:
            raise AssertionError(f"{e}; status {self.status()}; log:\n{self.logged()}") from None

    def wait_lines(self, n):
        return self.wait_status(f"{n} lines", lambda s: s["gauge"]["lines"] >= n)

    def connect(self):
        client = socket.socket(socket.AF_UNIX)
        client.settimeout(WAIT_S)
        client.connect(self.at("socket"))
        stream = client.makefile("rw")
        client.close()  # with the stream
        return stream

    def ask(self, method="status"):
        with self.connect() as client:
            client.write(json.dumps({"jsonrpc": "2.0", "id": 1, "method": method}) + "\n")
            client.flush()
            return json.loads(client.readline())["result"]

    def end(self, with_signal=signal.SIGTERM):
        self.process.send_signal(with_signal)
        code = self.process.wait(WAIT_S)
        self.process = None
        self.log.close()
        return code

    def close(self):
        if self.process:
            self.process.kill()
            self.process.wait(WAIT_S)
            self.log.close()
        if self.gauge:
            self.gauge.close()
        self.notify.close()
        shutil.rmtree(self.folder)

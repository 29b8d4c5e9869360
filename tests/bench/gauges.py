"""Pseudo-terminals that are gauges, the programs that read them, and what those cost by /proc."""
import array, atexit, fcntl, os, signal, subprocess, termios, time, tty

WAIT_S = 60


def until(what, condition, pause_s=0.01):
    end = time.monotonic() + WAIT_S
    while not condition():
        if time.monotonic() > end:
            raise SystemExit(f"bench: waited {WAIT_S} s for {what}, in vain")
        time.sleep(pause_s)


class Port:
    """One gauge. lines: bytes of one line each, which go on from feed to feed."""

    def __init__(self, lines):
        self.master, self.slave = os.openpty()
        tty.setraw(self.slave)
        self.path = os.ttyname(self.slave)
        self.lines = iter(lines)

    def send(self):
        os.write(self.master, next(self.lines))

    def unread(self):
        count = array.array("i", [0])
        fcntl.ioctl(self.slave, termios.FIONREAD, count)
        return count[0]

    def close(self):
        os.close(self.master)
        os.close(self.slave)


def feed(ports, n, hz):
    """n lines to each port, each line its own wake-up of its reader: ports take turns, nothing is
    made up for when we come late, and no line is sent before the one before was read."""
    step = 1 / hz / len(ports)
    due = time.monotonic()
    for _ in range(n):
        for port in ports:
            due = max(due + step, time.monotonic())
            time.sleep(max(0, due - time.monotonic()))
            until("a reader", lambda: port.unread() == 0, 0.001)
            port.send()
    for port in ports:
        until("a reader", lambda: port.unread() == 0)
    time.sleep(0.1)


class Program:
    """A child, and its costs so far: cpu_s, wakes (voluntary context switches)."""

    def __init__(self, *args, **options):
        options = {"stdout": subprocess.DEVNULL, "stderr": subprocess.DEVNULL, **options}
        self.child = subprocess.Popen(args, **options)
        self.pid = self.child.pid
        atexit.register(self.child.kill)  # a failed run leaves nobody behind; no-op when it ended

    def cost(self):
        with open(f"/proc/{self.pid}/schedstat") as file:
            cpu_s = int(file.read().split()[0]) / 1e9
        with open(f"/proc/{self.pid}/status") as file:
            wakes = int(file.read().split("\nvoluntary_ctxt_switches:")[1].split()[0])
        return cpu_s, wakes

    def memory_kB(self):
        with open(f"/proc/{self.pid}/smaps_rollup") as file:
            words = [line.split() for line in file.readlines()[1:]]
        size = {w[0].rstrip(":"): int(w[1]) for w in words}
        return size["Pss"], size["Private_Clean"] + size["Private_Dirty"], size["Rss"]

    def stop(self):
        self.child.send_signal(signal.SIGTERM)
        try:
            return self.child.wait(WAIT_S)
        except subprocess.TimeoutExpired:
            self.child.kill()
            raise SystemExit(f"bench: {self.child.args[0]} does not end")

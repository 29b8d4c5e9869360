"""Followers and askers on the daemon's socket, and programs started over and over."""
import multiprocessing, os, resource, select, socket, statistics, time

ASK = b'{"jsonrpc":"2.0","id":1,"method":"status"}\n'
FOLLOW = b'{"jsonrpc":"2.0","id":2,"method":"follow"}\n'
ASKS_AT_ONCE = 16
SLOW_EVERY, SLOW_BYTES, SLOW_PAUSE_S = 10, 512, 0.2


def connect(path):
    s = socket.socket(socket.AF_UNIX, socket.SOCK_STREAM)
    s.connect(path)
    return s


def _sip(s):
    """False when the daemon has closed it."""
    try:
        return bool(s.recv(SLOW_BYTES, socket.MSG_DONTWAIT))
    except BlockingIOError:
        return True


def _follow(path, n, pipe):
    """In a process of its own. Each tenth of many followers is slow: it takes half a kilobyte now
    and then. Tells through pipe, when asked, how many lines each of the others had since the last
    time, and how many followers are still connected."""
    _, hard = resource.getrlimit(resource.RLIMIT_NOFILE)
    resource.setrlimit(resource.RLIMIT_NOFILE, (hard, hard))
    poll, fast, slow = select.epoll(), {}, []
    for i in range(n):
        s = connect(path)
        s.sendall(FOLLOW)
        if i % SLOW_EVERY == SLOW_EVERY - 1:
            slow.append(s)
        else:
            fast[s.fileno()] = s
            poll.register(s, select.EPOLLIN)
    poll.register(pipe.fileno(), select.EPOLLIN)
    lines, due = dict.fromkeys(fast, 0), 0
    pipe.send("ready")
    while True:
        for fd, _ in poll.poll(SLOW_PAUSE_S):
            if fd == pipe.fileno():
                if pipe.recv() == "end":
                    return
                pipe.send((min(lines.values()), max(lines.values()), len(fast) + len(slow)))
                lines = dict.fromkeys(fast, 0)
                continue
            data = fast[fd].recv(65536)
            lines[fd] += data.count(b"\n")
            if not data:
                poll.unregister(fd)
                del fast[fd]
        if time.monotonic() >= due:
            due = time.monotonic() + SLOW_PAUSE_S
            slow = [s for s in slow if _sip(s)]


class Followers:
    def __init__(self, path, n):
        context = multiprocessing.get_context("fork")
        self.pipe, other = context.Pipe()
        self.process = context.Process(target=_follow, args=(path, n, other), daemon=True)
        self.process.start()
        self.pipe.recv()

    def count(self):
        """(least, most) lines of the quick ones since the last count, and how many are connected."""
        self.pipe.send("count")
        return self.pipe.recv()

    def end(self):
        self.pipe.send("end")
        self.process.join()


def answers(path, seconds):
    """How many times the status is answered in that time, to one that asks 16 times at once."""
    s = connect(path)
    s.settimeout(30)
    n, end = 0, time.monotonic() + seconds
    while time.monotonic() < end:
        s.sendall(ASK * ASKS_AT_ONCE)
        got = 0
        while got < ASKS_AT_ONCE:
            data = s.recv(65536)
            if not data:
                raise SystemExit("bench: the daemon closed the asker's connection")
            got += data.count(b"\n")
        n += got
    s.close()
    return n


def start_s(commands, times):
    """Median time from start to end of each command, taken turn by turn. Output goes to
    /dev/null."""
    quiet = [(os.POSIX_SPAWN_OPEN, 1, "/dev/null", os.O_WRONLY, 0)]
    taken = [[] for _ in commands]
    for _ in range(times):
        for command, times_s in zip(commands, taken):
            began = time.perf_counter()
            pid = os.posix_spawn(command[0], command, os.environ, file_actions=quiet)
            _, status = os.waitpid(pid, 0)
            times_s.append(time.perf_counter() - began)
            if status != 0:
                raise SystemExit(f"bench: {' '.join(command)} ends with status {status}")
    return [statistics.median(times_s) for times_s in taken]

# SPDX-License-Identifier: GPL-3.0-or-later
"""Drives a live recorder (the synthetic intake at a device's pace) from outside and prints TAP."""
import ctypes, glob, json, os, re, shutil, signal, socket, subprocess, sys, threading, time

pause = threading.Event().wait
program, work = sys.argv[1:3]
tests, speaking = 0, threading.Lock()


def ok(good, claim, why=""):
    global tests
    with speaking:
        tests += 1
        print(("ok" if good else "not ok"), tests, "-", claim)
        if not good:
            print("#", str(why).replace("\n", "\n# "))
        sys.stdout.flush()


def config(name, seconds, extra="", expected=""):
    path = f"{work}/{name}.conf"
    with open(path, "w") as out:
        out.write(f'''station = {{ name = "Brackenfold"; }};
intake = {{ driver = "synthetic"; real_time_pace = true; pulse = true; duration_s = {seconds}; rate_hz = 8000;
  contact_s = {min(seconds / 2, 7)}; snr = 40; start_utc = "2031-04-02T01:23:15.25Z"; }};
channels = ( {{ name = "photodiode"; column = 1; wavelength_nm = 620; }},
             {{ name = "gps"; column = 2; measure = "pulse"; }} );
{expected}
keep = {{ folder = "{work}/{name}"; free_mib = 0; {extra} }};
state = {{ socket = "{work}/{name}.sock"; }};
''')
    return path


class Manager:
    """What the service manager is told."""

    def __init__(self, path):
        self.path, self.lines = path, []
        self.socket = socket.socket(socket.AF_UNIX, socket.SOCK_DGRAM)
        self.socket.bind(path)
        self.socket.setblocking(False)

    def read(self):
        try:
            while True:
                self.lines += self.socket.recv(4096).decode().split("\n")
        except BlockingIOError:
            pass
        return self.lines


class Recorder:
    def __init__(self, path, **environment):
        self.log = open(f"{path}.log", "w+")
        self.process = subprocess.Popen([program, "--config", path, "--json", "--verbose"], stdout=subprocess.PIPE,
                                        stderr=self.log, env=dict(os.environ, **environment))

    def said(self):
        self.log.seek(0)
        return self.log.read()

    def wait_for(self, what, seconds=90):
        """Until `what()` is true."""
        end = time.monotonic() + seconds
        while time.monotonic() < end and self.process.poll() is None:
            if what():
                return True
            pause(0.02)
        return bool(what())

    def end(self, seconds=120):
        try:
            out, _ = self.process.communicate(timeout=seconds)
        except subprocess.TimeoutExpired:
            self.process.kill()
            out, _ = self.process.communicate()
            return None, out.decode(), self.said()
        return self.process.returncode, out.decode(), self.said()


def connect(path, seconds=60):
    end = time.monotonic() + seconds
    while True:
        reader = socket.socket(socket.AF_UNIX)
        try:
            reader.connect(path)
            return reader
        except OSError:
            reader.close()
            if time.monotonic() > end:
                raise
            pause(0.02)


def lines_of(reader, until, seconds=90):
    """Lines of JSON until `until(lines)`."""
    data, lines, end = b"", [], time.monotonic() + seconds
    reader.settimeout(0.2)
    while time.monotonic() < end and not until(lines):
        try:
            more = reader.recv(65536)
        except socket.timeout:
            continue
        except ConnectionError:
            break
        if not more:
            break
        data += more
        *whole, data = data.split(b"\n")
        lines += [json.loads(line) for line in whole]
    return lines


def thread(process, name):
    for task in glob.glob(f"/proc/{process.pid}/task/*/comm"):
        if open(task).read().strip() == name:
            return int(task.split("/")[-2])
    return None


def looked_at():
    recorder = Recorder(config("look", 20))
    idle = [connect(f"{work}/look.sock") for _ in range(14)]     # nobody reads here
    reader = connect(f"{work}/look.sock")
    reader.shutdown(socket.SHUT_WR)
    lines = lines_of(reader, lambda seen: any(line["what"] == "contact" for line in seen))
    kinds = [line["what"] for line in lines]
    ok(kinds and kinds[0] == "hello" and lines[0]["station"] == "Brackenfold" and
       lines[0]["channels"] == ["photodiode", "gps"], "a new reader is greeted", kinds[:3])
    ok({"device", "clock", "vigil", "disk", "latency", "levels", "series", "contact"} <= set(kinds), "and told everything", set(kinds))
    last = {line["what"]: line for line in lines}
    ok(last["clock"]["time_quality"] == "pulse" and last["clock"]["pulses_accepted"] >= 5, "the clock is shown", last["clock"])
    ok(abs(last["contact"]["snr"] - 40) < 12 and last["contact"]["utc"].startswith("2031-04-02T01:23:22.2"),
       "the contact is shown with its UTC", last["contact"])
    bins = sum(len(line["channels"]["photodiode"]["mean"]) for line in lines if line["what"] == "series")
    mean = [m for line in lines if line["what"] == "series" for m in line["channels"]["photodiode"]["mean"]]
    ok(bins > 60 and 0.25 < mean[0] < 0.35, "the strip chart has its bins", (bins, mean[:1]))
    ok(last["latency"]["to_ring"]["count"] > 500, "latencies are counted", last["latency"])
    extra = [connect(f"{work}/look.sock") for _ in range(3)]
    told = lines_of(extra[-1], lambda seen: len(seen) > 0, 30)
    ok(bool(told) and told[0]["what"] == "full", "too many readers are told so", told[:1])
    status, out, said = recorder.end()
    ok(status == 0 and len(out.splitlines()) == 1 and "lost" not in said.replace("times_lost", ""),
       "readers that never read cost nothing", (status, out, said))
    ok(not os.path.exists(f"{work}/look.sock"), "the socket is gone with the recorder")
    for each in idle + extra:
        each.close()


def left_over():
    path = config("left", 600)
    recorder = Recorder(path)
    connect(f"{work}/left.sock").close()
    recorder.process.kill()
    recorder.end()
    ok(os.path.exists(f"{work}/left.sock"), "a killed recorder leaves its socket")
    recorder = Recorder(path)
    try:
        connect(f"{work}/left.sock").close()
        ok(True, "and the next one takes its place")
    except OSError as error:
        ok(False, "and the next one takes its place", error)
    recorder.process.terminate()
    status, _, said = recorder.end()
    ok(status == 0, "a recorder asked to end ends well", (status, said))


def reloaded():
    manager = Manager(f"{work}/notify")
    path = config("reload", 600)
    os.mkdir(f"{work}/reload_state")
    recorder = Recorder(path, NOTIFY_SOCKET=manager.path, WATCHDOG_USEC="2000000", STATE_DIRECTORY=f"{work}/reload_state")
    recorder.wait_for(lambda: manager.read().count("WATCHDOG=1") > 2)
    ok("READY=1" in manager.lines, "the manager hears that it is ready", manager.lines)
    ok(manager.lines.count("WATCHDOG=1") > 2, "and that it lives", manager.lines)
    ok(any(line.startswith("STATUS=") for line in manager.lines), "and what it does", manager.lines)
    good = open(path).read()
    open(path, "w").write(good.replace('column = 1;', 'column = 99;'))
    recorder.process.send_signal(signal.SIGHUP)
    recorder.wait_for(lambda: "is refused" in recorder.said())
    ok(re.search(r"line \d+.*column.*99", recorder.said()) and "runs on as it was" in recorder.said(),
       "a bad configuration is refused with its line", recorder.said())
    open(path, "w").write(good.replace("column = 2", "column = 3"))
    recorder.process.send_signal(signal.SIGHUP)
    recorder.wait_for(lambda: "does not work" in recorder.said())
    with connect(f"{work}/reload.sock") as reader:
        again = lines_of(reader, lambda seen: any(line["what"] == "clock" for line in seen))
    ok("in column 3" in recorder.said() and recorder.process.poll() is None and again[0].get("station") == "Brackenfold",
       "one that does not fit the device gives way to the one before", recorder.said())
    ok(open(f"{work}/reload_state/limbwatch.conf.last-good").read() == good, "and is not remembered as the last good one")
    open(path, "w").write(good.replace("Brackenfold", "Hollowmere"))
    recorder.process.send_signal(signal.SIGHUP)

    def station():
        try:
            reader = connect(f"{work}/reload.sock", 5)
        except OSError:
            return False
        with reader:
            lines = lines_of(reader, lambda seen: len(seen) > 0, 10)
        return bool(lines) and lines[0].get("station") == "Hollowmere"
    ok(recorder.wait_for(station), "a good one is taken up", recorder.said())
    manager.read()
    ok("RELOADING=1" in manager.lines and manager.lines.index("RELOADING=1") <
       len(manager.lines) - 1 - manager.lines[::-1].index("READY=1"), "and the manager hears of it", manager.lines)
    recorder.process.terminate()
    status, _, said = recorder.end()
    ok(status == 0 and "STOPPING=1" in manager.read(), "and of the end", (status, said))


def renewed_after_the_vigil():
    expected = '''expected = ( { source = "Anwen"; kind = "immersion"; utc = "2031-04-02T01:23:20.25Z"; sigma_s = 0.2; } );
watch = { outside_vigils = false; vigil_before_s = 2; vigil_after_s = 2; };'''
    path = config("vigil", 10, expected=expected)
    recorder = Recorder(path)
    recorder.wait_for(lambda: "vigil for" in recorder.said())
    open(path, "a").write("\n")
    recorder.process.send_signal(signal.SIGHUP)
    recorder.wait_for(lambda: "read anew" in recorder.said())
    status, out, said = recorder.end()
    ok("when the vigil is over" in said, "during a vigil a new configuration waits", said)
    ok(out.count('"source":"Anwen"') >= 1, "and the contact is caught", (out, said))


def stuck():
    manager = Manager(f"{work}/notify-stuck")
    recorder = Recorder(config("stuck", 600), NOTIFY_SOCKET=manager.path, WATCHDOG_USEC="1000000")
    recorder.wait_for(lambda: manager.read().count("WATCHDOG=1") > 2)
    libc = ctypes.CDLL(None, use_errno=True)
    tid = thread(recorder.process, "signal")
    attach, detach = 16, 17         # PTRACE_ATTACH stops one thread, the others run on: linux/ptrace.h
    if libc.ptrace(attach, tid, None, None) != 0:
        ok(True, "a thread that stands still stops the watchdog # SKIP ptrace is not allowed here")
    else:
        os.waitpid(tid, 0x40000000)     # __WALL
        said = recorder.wait_for(lambda: manager.read() and "no progress" in recorder.said(), 90)
        pause(0.5)
        manager.read()
        before = len(manager.lines)
        pause(1.5)
        silent = "WATCHDOG=1" not in manager.read()[before:]
        ok(said and silent, "a thread that stands still stops the watchdog", (said, silent, recorder.said()))
        libc.ptrace(detach, tid, None, None)
    recorder.process.terminate()
    status, _, said = recorder.end()
    ok(status == 0, "and the recorder still ends", (status, said))


def last_good():
    path, kept = config("good", 3), f"{work}/state"
    os.mkdir(kept)
    status, out, said = Recorder(path, STATE_DIRECTORY=kept).end()
    ok(status == 0 and os.listdir(kept) == ["limbwatch.conf.last-good"], "a good configuration is remembered",
       (status, os.listdir(kept), said))
    open(path, "w").write("station = { name = ;\n")
    status, out, said = Recorder(path, STATE_DIRECTORY=kept).end()
    ok(status == 0 and "LAST GOOD" in said and "line 1" in said and out.count('"snr"') == 1,
       "and taken, loudly, when a restart finds a bad one", (status, out, said))
    open(path, "w").write(open(f"{kept}/limbwatch.conf.last-good").read().replace("column = 2", "column = 3"))
    status, out, said = Recorder(path, STATE_DIRECTORY=kept).end()
    ok(status == 0 and "LAST GOOD" in said and "in column 3" in said and out.count('"snr"') == 1,
       "also when it does not fit the device", (status, out, said))
    status, _, said = Recorder(path).end()
    ok(status == 2, "without a service manager a bad one is refused", (status, said))


def taken_away():
    recorder = Recorder(config("away", 14, extra="everything = true;"))
    recorder.wait_for(lambda: glob.glob(f"{work}/away/*.wav.part"))
    shutil.rmtree(f"{work}/away")
    status, _, said = recorder.end()
    kept = glob.glob(f"{work}/away/*.wav")
    ok(status == 1 and "taken away" in said and len(kept) == 1 and os.path.getsize(kept[0]) > 8000 * 2 * 3,
       "a folder that is removed is made again, and said", (status, kept, said))


def closed():
    """Started without standard output and error: nothing that is said gets into a recording."""
    path = config("closed", 4, extra="everything = true;")
    status = subprocess.call(["sh", "-c", f'exec "{program}" --verbose --config "{path}" >&- 2>&- <&-'])
    kept = glob.glob(f"{work}/closed/*.wav")
    data = open(kept[0], "rb").read() if len(kept) == 1 else b""
    ok(status == 0 and data[:4] == b"RIFF" and b"limbwatchd:" not in data, "without standard output recordings stay clean",
       (status, kept))


def unread():
    """Nobody reads the log: a pipe that is full from the start."""
    path = config("unread", 4)
    read_end, write_end = os.pipe()
    os.set_blocking(write_end, False)
    try:
        while True:
            os.write(write_end, b"x" * 4096)
    except BlockingIOError:
        os.set_blocking(write_end, True)
    process = subprocess.Popen([program, "--config", path, "--json", "--verbose"], stdout=subprocess.PIPE, stderr=write_end)
    os.close(write_end)
    try:
        out, _ = process.communicate(timeout=90)
        ok(process.returncode == 0 and out.count(b'"snr"') == 1, "a log that nobody reads stops nothing",
           (process.returncode, out))
    except subprocess.TimeoutExpired:
        process.kill()
        ok(False, "a log that nobody reads stops nothing", "it hangs")
    os.close(read_end)


def guarded(part):
    try:
        part()
    except Exception as error:          # the plan tells of the tests that are missing then
        print("#", part.__name__, repr(error))


print("1..32")
parts = [threading.Thread(target=guarded, args=(part,))
         for part in (looked_at, left_over, reloaded, renewed_after_the_vigil, stuck, unread, last_good, taken_away, closed)]
for part in parts:
    part.start()
for part in parts:
    part.join()

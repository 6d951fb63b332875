# kill -9 of the recorder at random instants, then a fresh start: what was lost, what is unreadable?
#   kill.py BUILD COUNT SEED [JOBS]
# A paced feeder writes numbered frames into the recorder's standard input and counts them, so what should be on disk
# is known independently of the recorder.  Prints one line; exit status 1 when anything is unreadable or more than
# 1 s of what was fed is missing.
import array, fcntl, json, os, random, signal, struct, subprocess, sys, tempfile, termios, threading, time, wave
from concurrent.futures import ThreadPoolExecutor

build, count, seed = sys.argv[1], int(sys.argv[2]), int(sys.argv[3])
jobs = int(sys.argv[4]) if len(sys.argv) > 4 else 4
rate, pace_s = 8000, 0.01
configuration = """
station = {{ name = "Brackenfold"; }};
intake = {{ driver = "pipe"; path = "{path}"; rate_hz = %d; channels = 1; format = "S16"; start_utc = "2031-04-02T01:23:30Z"; }};
channels = ( {{ name = "diode"; column = 1; wavelength_nm = 620; }} );
keep = {{ folder = "{folder}"; everything = true; free_mib = 0; }};
""" % rate


def frames(first, count):
    return struct.pack("<%dh" % count, *((first + k) % 30011 for k in range(count)))


def wait_until_read(pipe):
    """The clock starts when the recorder takes its first frames: before that nothing is being recorded."""
    waiting = array.array("i", [1])
    while waiting[0]:
        fcntl.ioctl(pipe, termios.FIONREAD, waiting)
        time.sleep(pace_s)


def one(case):
    rng = random.Random(seed * 100003 + case)
    after = 0.2 + 3.0 * rng.random()
    with tempfile.TemporaryDirectory(prefix="limbwatch-kill-") as work:
        folder, config = work + "/kept", work + "/limbwatch.conf"
        open(config, "w").write(configuration.format(path="-", folder=folder))
        daemon = subprocess.Popen([build + "/limbwatchd", "--quiet", "--config", config], stdin=subprocess.PIPE,
                                  stdout=subprocess.DEVNULL, stderr=subprocess.PIPE)
        timer = threading.Timer(after, daemon.send_signal, (signal.SIGKILL,))
        daemon.stdin.write(frames(0, 100))
        daemon.stdin.flush()
        wait_until_read(daemon.stdin)
        start, fed = time.monotonic(), 100
        timer.start()
        try:
            while True:
                due = int((time.monotonic() - start) * rate) + 100 - fed
                if due > 0:
                    daemon.stdin.write(frames(fed, due))
                    daemon.stdin.flush()
                    fed += due
                time.sleep(pace_s)
        except BrokenPipeError:
            pass
        timer.join()
        daemon.wait()
        # The next start repairs.  Its own input is empty.
        subprocess.run([build + "/limbwatchd", "--quiet", "--config", config], stdin=subprocess.DEVNULL,
                       stdout=subprocess.DEVNULL, stderr=subprocess.DEVNULL, timeout=60)
        kept, unreadable = 0, 0
        for name in os.listdir(folder) if os.path.isdir(folder) else []:
            path = os.path.join(folder, name)
            try:
                if name.endswith(".json"):
                    json.load(open(path))
                elif name.endswith(".wav"):
                    with wave.open(path) as w:
                        n = w.getnframes()
                        got = struct.unpack("<%dh" % n, w.readframes(n))
                    if list(got) != [k % 30011 for k in range(n)]:
                        raise ValueError("wrong samples")
                    kept = max(kept, n)
                else:
                    raise ValueError("left over")
            except Exception as error:
                print("# case %d: %s: %s" % (case, name, error))
                unreadable += 1
        return (fed - kept) / rate, unreadable


with ThreadPoolExecutor(jobs) as pool:
    results = list(pool.map(one, range(count)))
lost = sorted(r[0] for r in results)
bad = sum(r[1] for r in results)
print("kill -9 at %d random instants (seed %d): lost median %.3f s, most %.3f s; unreadable or wrong files: %d"
      % (count, seed, lost[len(lost) // 2], lost[-1], bad))
sys.exit(bad > 0 or lost[-1] > 1.0)

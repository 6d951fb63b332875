# Replay of 48 kHz stereo 24 bit with pulse channel, while everything is recorded, on one core; beside a straightforward
# peer in the same run: scipy.signal.oaconvolve, one call per template, on the same file's detector channel.
#   replay.py BUILD [SECONDS]
import os, re, resource, subprocess, sys, tempfile, time, wave
import numpy as np
from scipy.signal import oaconvolve

build, seconds = sys.argv[1], float(sys.argv[2]) if len(sys.argv) > 2 else 600.0
core, probe_s = {0}, 0.05
channels = """channels = ( { name = "diode"; column = 1; wavelength_nm = 620; passband_nm = 120; aperture_m = 0.28; },
  { name = "gps"; column = 2; measure = "pulse"; } );"""
event = """driver = "synthetic"; seed = 3; duration_s = %g; start_utc = "2031-04-02T01:00:00.25Z"; start_sigma_s = 0.05;
  kind = "immersion"; contact_s = %g; distance_km = 371500; shadow_speed_mps = 612; wavelength_nm = 620; snr = 25;
  pulse = true; clock_error_ppm = 40;"""
templates, taps = 32, int(16 * 0.0182 * 48000)          # the default bank; a window of 16 T_F at full rate


def write(path, intake, folder, everything):
    open(path, "w").write('station = { name = "Brackenfold"; };\nintake = { %s };\n%s\nkeep = { folder = "%s"; '
                          'everything = %s; free_mib = 0; };\n' % (intake, channels, folder, everything))


def pinned():
    os.sched_setaffinity(0, core)


def timed(command):
    before = resource.getrusage(resource.RUSAGE_CHILDREN)
    start = time.monotonic()
    subprocess.run(command, check=True, stdout=subprocess.DEVNULL, stderr=subprocess.DEVNULL, preexec_fn=pinned)
    wall = time.monotonic() - start
    after = resource.getrusage(resource.RUSAGE_CHILDREN)
    return wall, after.ru_utime + after.ru_stime - before.ru_utime - before.ru_stime


with tempfile.TemporaryDirectory(prefix="limbwatch-bench-") as work:
    write(work + "/make.conf", event % (seconds, seconds / 2), work + "/made", "true")
    subprocess.run([build + "/limbwatchd", "--quiet", "--config", work + "/make.conf"], check=True,
                   stdout=subprocess.DEVNULL)
    made = [f for f in os.listdir(work + "/made") if f.endswith(".wav")][0]
    path = os.path.join(work, "made", made)
    write(work + "/replay.conf", 'driver = "file"; path = "%s"; bext_sigma_s = 0.05;' % path, work + "/kept", "true")
    command = [build + "/limbwatchd", "--quiet", "--json", "--config", work + "/replay.conf"]
    walls = [timed(command) for _ in range(3)]
    wall, cpu = sorted(walls)[1]
    check = subprocess.run(command + ["--check"], check=True, capture_output=True, text=True).stdout
    ring = float(re.search(r"ring holds .*? \(([\d.]+) MB", check).group(1)) * 1e6
    with open(work + "/time", "w") as err:
        probe = subprocess.Popen(command, stdout=subprocess.DEVNULL, stderr=err)
        peak = 0
        while probe.poll() is None:
            try:
                text = open("/proc/%d/smaps_rollup" % probe.pid).read()
                peak = max(peak, int(re.search(r"^Pss:\s+(\d+)", text, re.M).group(1)) * 1024)
            except (OSError, AttributeError):
                pass
            time.sleep(probe_s)
    print("replay, recording everything: %.0f x real time by the wall clock, %.0f x by processor time "
          "(one core, median of 3; %.0f s of 48 kHz stereo 24 bit with pulse)" % (seconds / wall, seconds / cpu, seconds))
    print("share of this core at real time: %.2f%%" % (100 * cpu / seconds))
    print("memory: peak Pss %.1f MiB, of which ring %.1f MiB; beside the ring %.1f MiB"
          % (peak / 2**20, ring / 2**20, (peak - ring) / 2**20))

    with wave.open(path) as w:
        n = min(w.getnframes(), int(60 * 48000))
        raw = np.frombuffer(w.readframes(n), np.uint8).reshape(n, 6)[:, :3].astype(np.int32)
    os.sched_setaffinity(0, core)
    x = (((raw[:, 2] ^ 0x80) - 0x80) << 16 | raw[:, 1] << 8 | raw[:, 0]).astype(np.float32) / 2**23
    bank = np.random.default_rng(1).standard_normal((templates, taps)).astype(np.float32)
    start = time.process_time()
    for template in bank:
        oaconvolve(x, template, mode="valid")
    peer = (time.process_time() - start) * seconds / (n / 48000)
    print("peer, oaconvolve x %d templates of %d taps, convolution only: %.1f x real time; "
          "limbwatchd (everything: reading, pulse, clock, detection, recording) takes 1/%.0f of its processor time"
          % (templates, taps, seconds / peer, peer / cpu))

# A live recorder at 48 kHz stereo 24 bit with pulse, as a card would deliver it: latencies, frames lost, memory beside the ring, time
# from its start to the first frame; and by callgrind, thread by thread, the instructions of a second of it.
#   live.py BUILD [SECONDS]
import json, os, re, socket, subprocess, sys, tempfile, time

build, seconds = sys.argv[1], float(sys.argv[2]) if len(sys.argv) > 2 else 60.0


def configure(work, name, duration):
    path = f"{work}/{name}.conf"
    open(path, "w").write(f'''station = {{ name = "Brackenfold"; }};
intake = {{ driver = "synthetic"; real_time_pace = true; pulse = true; duration_s = {duration}; contact_s = {min(duration / 2, 10)};
  snr = 25; clock_error_ppm = 40; }};
channels = ( {{ name = "diode"; column = 1; wavelength_nm = 620; passband_nm = 120; }},
             {{ name = "gps"; column = 2; measure = "pulse"; }} );
keep = {{ folder = "{work}/{name}"; everything = true; free_mib = 0; }};
state = {{ socket = "{work}/{name}.sock"; }};
''')
    return path


def lines(path, seconds):
    end = time.monotonic() + seconds
    with socket.socket(socket.AF_UNIX) as reader:
        while reader.connect_ex(path):
            if time.monotonic() > end:
                raise SystemExit("no state socket")
        data = b""
        while more := reader.recv(65536):
            data += more
            *whole, data = data.split(b"\n")
            yield from (json.loads(line) for line in whole)


def busy_seconds(pid):
    """Processor time by thread."""
    found = {}
    for task in os.listdir(f"/proc/{pid}/task"):
        try:
            name = open(f"/proc/{pid}/task/{task}/comm").read().strip()
            found[name] = int(open(f"/proc/{pid}/task/{task}/schedstat").read().split()[0]) * 1e-9
        except OSError:
            pass
    return found


def threads_of(out):
    """Instructions by thread from callgrind's output files."""
    found = []
    for name in sorted(os.listdir(os.path.dirname(out))):
        if name.startswith(os.path.basename(out) + "-"):
            text = open(os.path.join(os.path.dirname(out), name)).read()
            total = re.search(r"^(?:summary|totals): (\d+)", text, re.M)
            found.append((int(re.search(r"^thread: (\d+)", text, re.M).group(1)), int(total.group(1))))
    return dict(found)


with tempfile.TemporaryDirectory(prefix="limbwatch-bench-") as work:
    path = configure(work, "live", seconds)
    started = time.monotonic()
    recorder = subprocess.Popen([build + "/limbwatchd", "--config", path], stdout=subprocess.DEVNULL, stderr=subprocess.PIPE, text=True)
    first, peak, last, busy = None, 0, {}, {}
    for line in lines(f"{work}/live.sock", 10):
        last[line["what"]] = line
        if first is None and line["what"] == "clock" and line["frame"] > 0:
            first = time.monotonic() - started - line["frame"] / 48000
        try:
            text = open(f"/proc/{recorder.pid}/smaps_rollup").read()
            peak = max(peak, int(re.search(r"^Pss:\s+(\d+)", text, re.M).group(1)) * 1024)
        except OSError:
            pass
        busy.update(busy_seconds(recorder.pid))
    recorder.wait()
    check = subprocess.run([build + "/limbwatchd", "--config", path, "--check"], check=True, capture_output=True, text=True).stdout
    ring = float(re.search(r"ring holds .*? \(([\d.]+) MB", check).group(1)) * 1e6
    print(f"live, {seconds:.0f} s of 48 kHz stereo 24 bit with pulse, everything recorded: {last['device']['frames_lost']} frames lost by "
          f"the device, {last['disk']['frames_lost']} by the disk; real-time priority {last['device']['real_time_priority']}")
    for what in ("to_ring", "to_trigger"):
        s = last["latency"][what]
        print(f"  sample in {what.replace('_', ' ')}: p50 {s['p50_s'] * 1e3:.2f} ms, p99.9 {s['p999_s'] * 1e3:.2f} ms, "
              f"worst {s['worst_s'] * 1e3:.2f} ms ({s['count']} times, a block of 10 ms each)")
    print(f"  memory beside the ring (Pss, peak): {(peak - ring) / 2**20:.1f} MiB (ring {ring / 2**20:.1f} MiB)")
    print(f"  from the start of the program to its first frame: {first:.2f} s")
    print("  share of one core: " + ", ".join(f"{k} {100 * v / seconds:.2f}%" for k, v in sorted(busy.items())) +
          " (limbwatchd: main, with the start; acquire makes the synthetic night)")
    totals = []
    for duration in (20, 40):
        path = configure(work, f"counted{duration}", duration)
        subprocess.run(["valgrind", "--tool=callgrind", "--separate-threads=yes", f"--callgrind-out-file={work}/out{duration}",
                        build + "/limbwatchd", "--quiet", "--config", path], check=True, capture_output=True)
        totals.append(threads_of(f"{work}/out{duration}"))
    each = {k: (totals[1].get(k, 0) - totals[0].get(k, 0)) / 20e6 for k in totals[1]}
    print("  instructions of a second, by thread in the order they start (main, log, keeper, signal, acquire with the synthetic "
          "night it makes): " + ", ".join(f"{each[k]:.2f} M" for k in sorted(each)))

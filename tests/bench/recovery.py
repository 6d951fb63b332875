# Recovery of synthetic optical contacts through the whole recorder, and false triggers in hours of noise.
#   recovery.py BUILD [COUNT] [HOURS]
# Each contact is another seed: time, speed (within 8%), card error and noise are drawn; the recorder is told the expected
# instant +- 0.8 s (vigil) or nothing (always watching).  SNR is that of the ideal matched filter in white noise.
import json, math, os, random, subprocess, sys, tempfile
from concurrent.futures import ThreadPoolExecutor
from datetime import datetime

build, count = sys.argv[1], int(sys.argv[2]) if len(sys.argv) > 2 else 200
hours = float(sys.argv[3]) if len(sys.argv) > 3 else 10
start = datetime.fromisoformat("2031-04-02T01:23:30.250000+00:00").timestamp()
text = """station = { name = "Brackenfold"; };
intake = { driver = "synthetic"; seed = %d; rate_hz = 8000; duration_s = %g; start_utc = "2031-04-02T01:23:30.250Z";
  start_sigma_s = 0.05; kind = "%s"; contact_s = %.7f; distance_km = 371500; shadow_speed_mps = %.3f; wavelength_nm = 620;
  passband_nm = 120; aperture_m = 0.28; %s level = 0.01; pulse = true; clock_error_ppm = %.2f; %s };
channels = ( { name = "diode"; column = 1; wavelength_nm = 620; passband_nm = 120; aperture_m = 0.28; },
  { name = "gps"; column = 2; measure = "pulse"; } );
%s
keep = { folder = "%s"; free_mib = 0; };
"""


def run(work, case, duration, kind, contact, speed, snr, ppm, extra="", expected=""):
    name = "%s/%s" % (work, case)
    open(name + ".conf", "w").write(text % (int(case.split("-")[-1]) + 1, duration, kind,
                                            contact, speed, 'snr = %g;' % snr if snr else '', ppm, extra, expected, name))
    out = subprocess.run([build + "/limbwatchd", "--quiet", "--json", "--config", name + ".conf"], check=True,
                         capture_output=True, text=True).stdout
    return [json.loads(line) for line in out.splitlines()]


def contact(work, snr, vigil, seed):
    rng = random.Random("%g %d %d" % (snr, vigil, seed))
    at, kind = 14 + rng.random(), ("immersion", "emersion")[seed % 2]
    expected = ""
    if vigil:
        when = datetime.utcfromtimestamp(start + at + rng.gauss(0, 0.8)).isoformat(timespec="milliseconds")
        expected = ('expected = ( { source = "Anwen"; kind = "%s"; utc = "%sZ"; sigma_s = 0.8; moon_distance_km = 371500; '
                    'shadow_speed_mps = 612; } );' % (kind, when))
    found = run(work, "%d-%d-%d" % (vigil, snr, seed), 26, kind, at, 612 * (1 + rng.uniform(-0.08, 0.08)), snr,
                rng.uniform(-100, 100), expected=expected)
    hits, false = [], 0
    for c in found:
        t = datetime.fromisoformat(c["utc"].replace("Z", "+00:00")).timestamp() - start
        if c["kind"] == kind and abs(t - at) < 0.1:
            hits.append((t - at, c["sigma_s"]))
        else:
            false += 1
    return hits[:1], false


with tempfile.TemporaryDirectory(prefix="limbwatch-recovery-") as work, ThreadPoolExecutor(os.cpu_count()) as pool:
    for vigil in (1, 0):
        for snr in (8, 15):
            results = list(pool.map(lambda seed: contact(work, snr, vigil, seed), range(count)))
            hits = [h for r in results for h in r[0]]
            rms = math.sqrt(sum(e * e for e, s in hits) / max(1, len(hits)))
            inside = sum(abs(e) < s for e, s in hits) / max(1, len(hits))
            print("%s, SNR %2d: %d of %d recovered, time error RMS %.3f ms, mean sigma_s %.3f ms, within 1 sigma %.0f%%, "
                  "other triggers %d" % ("in a vigil" if vigil else "always watching", snr, len(hits), count, rms * 1e3,
                                         1e3 * sum(s for e, s in hits) / max(1, len(hits)), 100 * inside,
                                         sum(r[1] for r in results)), flush=True)
    for noise in ("", "red_noise_rms = 0.02; red_corner_hz = 5;"):
        found = run(work, "noise-%d" % len(noise), hours * 3600, "none", 1, 612, None, 40, "noise_rms = 0.02; " + noise)
        print("%g h of %s noise, always watching: %d false triggers (0.5 per ten hours set)"
              % (hours, "red" if noise else "white", len(found)), flush=True)

#!/usr/bin/python3
# SPDX-License-Identifier: GPL-3.0-or-later
"""Renders what the scenes of `make check-hardware` play: event.py FOLDER.

FOLDER/event.wav: 48 kHz, S16, two columns: a detector that sees an immersion (Fresnel integrals from scipy, not from
limbwatch), and the one-second pulse.  It is what a card would deliver whose clock is RATE_ERROR fast: instants are true
seconds, the frames between two pulses are not 48000.  FOLDER/truth (shell assignments) says what is in it.
FOLDER/noise.raw: a minute in which no stretch is like another, for telling a lost frame from the samples alone."""
import sys
import wave

import numpy as np
from scipy.special import erf, fresnel

RATE, SEED = 48000, 20310402
RATE_ERROR = -48.8e-6           # what snd-aloop makes of a rate shift of 100005; the scene "quiet" measures it
LENGTH_S, FIRST_PULSE_S, CONTACT_S = 36.0, 0.98, 21.371234      # aplay takes 0.02 s; the contact counts from the first pulse
WAVELENGTH_M, PASSBAND_M, DISTANCE_M, SPEED_MPS = 620e-9, 120e-9, 371500e3, 612.0


def immersion(t):
    """Light of a point source, 1 outside the shadow; t in seconds from the geometric contact (Born & Wolf, 8.7)."""
    total = 0
    for wavelength in WAVELENGTH_M + PASSBAND_M * (np.arange(15) - 7) / 15:
        s, c = fresnel(-SPEED_MPS * t * np.sqrt(2 / (wavelength * DISTANCE_M)))
        total = total + 0.5 * ((0.5 + c) ** 2 + (0.5 + s) ** 2)
    return total / 15


def main(folder):
    random = np.random.default_rng(SEED)
    t = np.arange(int(LENGTH_S * RATE)) / (RATE * (1 + RATE_ERROR)) - FIRST_PULSE_S
    light = 0.1 + 0.2 * immersion(t - CONTACT_S) + random.normal(0, 0.06, t.size)
    pulse = random.normal(0, 1e-4, t.size)
    for second in range(int(LENGTH_S - FIRST_PULSE_S)):
        for edge, height in ((second, 0.5), (second + 0.1, -0.5)):      # smooth over a frame: no energy is aliased
            pulse += height * 0.5 * (1 + erf((t - edge) * RATE / np.sqrt(2)))
    samples = np.round(32767 * np.clip(np.stack([light, pulse], 1), -1, 1)).astype("<i2")
    with wave.open(f"{folder}/event.wav", "wb") as out:
        out.setparams((2, 2, RATE, 0, "NONE", ""))
        out.writeframes(samples.tobytes())
    noise = random.integers(1, 3000, (60 * RATE, 2)) * random.choice([-1, 1], (60 * RATE, 2))
    noise.astype("<i2").tofile(f"{folder}/noise.raw")
    with open(f"{folder}/truth", "w") as out:
        out.write(f"length_s={LENGTH_S}\nfirst_pulse_s={FIRST_PULSE_S}\ncontact_s={CONTACT_S}\n"
                  f"rate_error_ppm={RATE_ERROR * 1e6:.1f}\nspeed_mps={SPEED_MPS}\n")
    print(f"# seed {SEED}")


main(sys.argv[1])

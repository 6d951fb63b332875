/* SPDX-License-Identifier: GPL-3.0-or-later */
#include <math.h>
#include <stdlib.h>
#include <string.h>
#include "clock_probe.h"
#include "limbwatch/pulse.h"
#include "limbwatch/synthetic.h"

static struct setting_value values[128];

void clock_probe_set(const char *name, double x)
{
	for (size_t k = 0; intake_synthetic.settings[k].name; k++)
		if (!strcmp(intake_synthetic.settings[k].name, name)) {
			values[k].number = x;
			values[k].integer = llround(x);
			return;
		}
	abort();
}

void clock_probe_reset(void)
{
	settings_fallbacks(intake_synthetic.settings, values);
	clock_probe_set("kind", 2);
	clock_probe_set("pulse", 1);
	clock_probe_set("noise_rms", 0);
}

static void feed(struct frame_clock *clock, struct pulse_detector *detector, struct intake *in)
{
	static double samples[65536];
	struct pulse_edge edge[64];
	struct block block;
	size_t n;

	while (in->driver->read(in, &block, 100) == 1) {
		frames_to_double(samples, block.frames, in->format, 1, block.count);
		n = pulse_detector_execute(detector, samples, block.count, block.first, edge, 64);
		for (size_t k = 0; k < n; k++)
			frame_clock_add_pulse(clock, edge[k].frame, edge[k].sigma_frames);
	}
	n = pulse_detector_finish(detector, edge, 64);
	for (size_t k = 0; k < n; k++)
		frame_clock_add_pulse(clock, edge[k].frame, edge[k].sigma_frames);
}

struct frame_clock *clock_probe_play(double seconds)
{
	struct frame_clock_settings settings = { .rate_tolerance = 200e-6, .pulse_sigma_s = 50e-9 };
	struct pulse_settings pulse = { .width_s = 0.1 };
	struct frame_clock *clock;
	struct pulse_detector *detector;
	struct intake *in;

	clock_probe_set("duration_s", seconds);
	if (intake_synthetic.open(&in, values) < 0)
		abort();
	settings.rate = pulse.rate = in->rate;
	if (frame_clock_create(&clock, &settings) < 0 || pulse_detector_create(&detector, &pulse) < 0)
		abort();
	frame_clock_add_label(clock, 0, in->origin.when, in->origin.sigma_s, false, TIME_HOST);
	in->driver->start(in);
	feed(clock, detector, in);
	frame_clock_solve(clock);
	in->driver->close(in);
	pulse_detector_destroy(detector);
	return clock;
}

double clock_probe_rms(int n, double seconds)
{
	double squares = 0;
	int samples = 0;

	for (int seed = 1; seed <= n; seed++) {
		struct frame_clock *clock;

		clock_probe_set("seed", seed);
		clock = clock_probe_play(seconds);
		for (double t = seconds * 0.2; t < seconds * 0.8; t += 0.377) {
			struct clock_reading r;
			struct tai start;

			frame_clock_at(clock, synthetic_frame(values, t), &r);
			tai_parse_utc(&start, "2031-04-02T01:23:15.25Z");
			if (r.quality != TIME_PULSE)
				squares = NAN;
			squares += pow(tai_difference(r.when, tai_add(start, t)), 2);
			samples++;
		}
		frame_clock_destroy(clock);
	}
	return sqrt(squares / samples);
}

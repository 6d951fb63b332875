/* SPDX-License-Identifier: GPL-3.0-or-later */
/* --check: what the configuration means, in plain words with units. */
#include <errno.h>
#include <math.h>
#include "lane.h"
#include "limbwatch/log.h"
#include "limbwatch/recorder.h"
#include "limbwatch/ring.h"
#include "listen.h"
#include "plan.h"

static void say_station(const struct config *c, FILE *out)
{
	fprintf(out, "Station %s", c->station.name);
	if (c->station.placed)
		fprintf(out, ", latitude %.6f deg, longitude %.6f deg (east positive)", c->station.latitude_deg,
		        c->station.longitude_deg);
	if (c->station.placed && isfinite(c->station.height_m))
		fprintf(out, ", %.0f m above the ellipsoid", c->station.height_m);
	fprintf(out, ".\n");
}

static void say_intake(const struct intake *in, FILE *out)
{
	char text[TAI_TEXT];

	fprintf(out, "Intake %s, %s: %u channel%s of %s samples at %g Hz, %s.\n", in->driver->name, in->name,
	        in->format.channels, in->format.channels == 1 ? "" : "s", sample_type_name(in->format.type), in->rate,
	        in->real_time ? "live" : "a replay, read as fast as it goes");
	if (in->total_frames)
		fprintf(out, "  It holds %.3f s.\n", (double)in->total_frames / in->rate);
	if (in->origin.quality != TIME_FREE)
		fprintf(out, "  Its first frame was taken at %s, +- %g s (from the %s).\n",
		        tai_format_utc(text, in->origin.when, 6), in->origin.sigma_s, in->origin.source);
	else if (!in->real_time)
		fprintf(out, "  It does not say when it was taken: times will be counted from its first frame.\n");
}

static void say_receiver(const struct config_channel *ch, FILE *out)
{
	const struct curve_parameters *r = &ch->curve;

	if (r->passband.wavelength_m < 1e-4)
		fprintf(out, "wavelength %.4g nm", r->passband.wavelength_m * 1e9);
	else
		fprintf(out, "%.6g MHz (wavelength %.4g m)", 299.792458 / r->passband.wavelength_m, r->passband.wavelength_m);
	if (r->passband.width_m > 0)
		fprintf(out, ", passband %.3g%% wide", 100 * r->passband.width_m / r->passband.wavelength_m);
	if (r->aperture_m > 0)
		fprintf(out, ", aperture %g m", r->aperture_m);
	if (r->integration_s > 0)
		fprintf(out, ", integration %g s", r->integration_s);
	if (r->low_pass_s > 0)
		fprintf(out, ", time constant %g s", r->low_pass_s);
	if (r->high_pass_hz > 0)
		fprintf(out, ", AC-coupled at %g Hz", r->high_pass_hz);
	if (ch->polarity < 0)
		fprintf(out, ", inverted");
	if (ch->response_delay_s != 0 || ch->response_delay_sigma_s > 0)
		fprintf(out, ", delay %g +- %g s", ch->response_delay_s, ch->response_delay_sigma_s);
}

static int say_lane(const struct lane_settings *s, FILE *out)
{
	struct lane_shape shape;
	char why[256];

	if (lane_plan(&shape, s, why, sizeof(why)) < 0) {
		log_error("%s", why);
		return -EINVAL;
	}
	fprintf(out, "T_F %.4g s at %.0f m/s (watched %.2f to %.2f times that), window %.3g s, working rate %.5g Hz",
	        shape.fresnel_time_s, shape.curve.speed_mps, shape.scale_min, shape.scale_max,
	        DETECTOR_WINDOW / shape.series_rate, shape.series_rate);
	if (shape.surviving < 0.999)
		fprintf(out, "; %.2g%% of the edge's energy survives the AC coupling", 100 * shape.surviving);
	fprintf(out, ".\n");
	return 0;
}

static int say_channel(const struct config *c, unsigned k, const struct intake *in, FILE *out)
{
	const struct config_channel *ch = &c->channel[k];
	struct lane_settings s = { .config = c, .channel = k, .format = in->format, .rate = in->rate };
	int ret = 0;

	fprintf(out, "Channel %s, column %u: ", ch->name, ch->column + 1);
	if (ch->column >= in->format.channels) {
		fprintf(out, "missing.\n");
		log_error("channel \"%s\" stands in column %u, but the intake has %u", ch->name, ch->column + 1,
		          in->format.channels);
		return -EINVAL;
	}
	if (ch->measure == MEASURE_PULSE) {
		fprintf(out, "one-second pulse, %s, %g s long, jitter %.3g us, delay %.3g +- %.3g us.\n",
		        ch->polarity > 0 ? "rising edge leads" : ch->polarity < 0 ? "falling edge leads" : "polarity found out",
		        ch->pulse.width_s, ch->pulse.jitter_s * 1e6, ch->pulse.delay_s * 1e6, ch->pulse.delay_sigma_s * 1e6);
		return 0;
	}
	if (ch->measure == MEASURE_AUX) {
		fprintf(out, "recorded beside, not measured.\n");
		return 0;
	}
	say_receiver(ch, out);
	fprintf(out, ".\n");
	for (unsigned lane = 0; ret == 0 && lane < lanes_outside(c); lane++) {
		lane_outside(&s, lane);
		fprintf(out, "  Outside vigils: ");
		ret = say_lane(&s, out);
	}
	for (size_t e = 0; ret == 0 && e < c->expecteds; e++) {
		s.expected = (int)e;
		fprintf(out, "  For %s: ", c->expected[e].source);
		ret = say_lane(&s, out);
	}
	return ret;
}

static void say_expected(const struct config *c, FILE *out)
{
	char text[TAI_TEXT];

	for (size_t k = 0; k < c->expecteds; k++) {
		const struct config_expected *e = &c->expected[k];
		double before = fmax(c->watch.vigil_before_s, c->watch.vigil_sigmas * e->sigma_s);
		double after = fmax(c->watch.vigil_after_s, c->watch.vigil_sigmas * e->sigma_s);

		fprintf(out, "Expected: %s of %s at %s +- %g s; limb at %.0f km, shadow %.0f m/s +- %.0f%%.\n",
		        contact_kind_name(e->kind), e->source, tai_format_utc(text, e->when, 3), e->sigma_s,
		        e->distance_m / 1e3, e->speed_mps, 100 * e->speed_tolerance);
		fprintf(out, "  Vigil from %s", tai_format_utc(text, tai_add(e->when, -before), 0));
		fprintf(out, " to %s, recorded whole.\n", tai_format_utc(text, tai_add(e->when, after), 0));
	}
	if (!c->expecteds)
		fprintf(out, "No contact is expected.\n");
}

static void say_watch(const struct config *c, FILE *out)
{
	if (c->watch.outside)
		fprintf(out, "Outside vigils it watches for %s of shadows of %.0f to %.0f m/s at %.0f km.\n",
		        c->watch.kind[0] && c->watch.kind[1] ? "immersions and emersions" :
		        c->watch.kind[CONTACT_IMMERSION] ? "immersions" : "emersions",
		        c->watch.speed_min_mps, c->watch.speed_max_mps, c->watch.distance_m / 1e3);
	else
		fprintf(out, "Outside vigils it does not watch.\n");
	if (c->watch.threshold > 0)
		fprintf(out, "Triggers at SNR %g, whatever the false alarms.\n", c->watch.threshold);
	else
		fprintf(out, "Tolerated false alarms: %g in ten hours outside vigils, %g in a vigil.\n",
		        c->watch.false_alarms_per_night, c->watch.false_alarms_per_vigil);
}

static void say_clock(const struct config *c, FILE *out)
{
	char text[TAI_TEXT];
	bool pulse = false;

	for (size_t k = 0; k < c->channels; k++)
		pulse |= c->channel[k].measure == MEASURE_PULSE;
	fprintf(out, "Time: %s; leap seconds known until %s.\n",
	        pulse ? "each sample from the pulse channel" : "no pulse channel, so from the host's clock or the file",
	        leap_seconds_expiry().ns == INT64_MAX ? "an unknown date" : tai_format_utc(text, leap_seconds_expiry(), 0));
}

static double vigil_seconds(const struct config *c)
{
	double total = 0;

	for (size_t k = 0; k < c->expecteds; k++)
		total += fmax(c->watch.vigil_before_s, c->watch.vigil_sigmas * c->expected[k].sigma_s) +
			fmax(c->watch.vigil_after_s, c->watch.vigil_sigmas * c->expected[k].sigma_s);
	return total;
}

static void say_keep(const struct config *c, const struct intake *in, const struct listener *l, FILE *out)
{
	double bytes = in->rate * (double)frame_bytes(in->format);
	double backlog = (double)listener_backlog(l);
	double ring = (double)ring_round((size_t)(backlog + c->keep.ring_s * in->rate));

	fprintf(out, "Recordings go to %s: %s. Everything would be %.3g GB a day; ", c->keep.folder,
	        c->keep.everything ? "everything is kept" : "vigils whole, other contacts with their surroundings",
	        bytes * 86400 / 1e9);
	if (c->keep.everything)
		fprintf(out, "that is what is kept.\n");
	else
		fprintf(out, "the vigils above are %.3g GB, a contact outside them %.3g MB.\n",
		        bytes * vigil_seconds(c) / 1e9, bytes * (c->keep.pre_s + c->keep.post_s) / 1e6);
	fprintf(out, "  Outside vigils %g s before and %g s after a contact; %lld MB stay free on the disk.\n",
	        c->keep.pre_s, c->keep.post_s, (long long)(c->keep.free_bytes / 1000000));
	fprintf(out, "  The ring holds %.0f s (%.1f MB of memory): the disk may stall %.0f s.\n", ring / in->rate,
	        ring * (double)frame_bytes(in->format) / 1e6, (ring - backlog) / in->rate);
}

static void say_live(const struct config *c, const struct intake *in, FILE *out)
{
	if (!in->real_time)
		return;
	if (c->live.priority > 0)
		fprintf(out, "Live: the device is read at real-time priority %d", c->live.priority);
	else
		fprintf(out, "Live: the device is read without real-time priority");
	fprintf(out, ", memory is %slocked.\n", c->live.lock_memory ? "" : "not ");
	if (in->driver->comes_back)
		fprintf(out, "  A device that is lost, or silent for %g s, is opened anew until it is there.\n", c->live.silence_s);
	if (*c->state.socket)
		fprintf(out, "  What the recorder is doing is shown at %s.\n", c->state.socket);
}

static int describe(const struct config *c, struct intake *in, FILE *out)
{
	static struct acquire acquire;  /* only its address counts here */
	struct plans plans;
	struct listener_settings settings = { .config = c, .intake = in, .acquire = &acquire, .plans = &plans };
	struct listener *listener;
	int ret = 0;

	say_station(c, out);
	say_intake(in, out);
	for (unsigned k = 0; k < c->channels; k++)
		if (say_channel(c, k, in, out) < 0)
			ret = -EINVAL;
	if (ret < 0)
		return ret;
	say_expected(c, out);
	say_watch(c, out);
	say_clock(c, out);
	ret = listener_create(&listener, &settings);
	if (ret < 0)
		return ret;
	say_keep(c, in, listener, out);
	say_live(c, in, out);
	listener_destroy(listener);
	return 0;
}

int recorder_describe(const struct config *config, FILE *out)
{
	struct intake *intake;
	int ret;

	ret = config->driver->open(&intake, config->driver_values);
	if (ret < 0)
		return ret;
	ret = describe(config, intake, out);
	config->driver->close(intake);
	return ret;
}

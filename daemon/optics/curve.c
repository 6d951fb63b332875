/* SPDX-License-Identifier: GPL-3.0-or-later */
#include <errno.h>
#include <math.h>
#include <stdbool.h>
#include <stdlib.h>

#include "limbwatch/curve.h"
#include "limbwatch/fresnel.h"
#include "pattern.h"

#define FWHM_PER_SIGMA 2.3548200450309493 /* 2 sqrt(2 ln 2) */

/* Largest smoothing, in Fresnel units and Fresnel times.  Wider than this there is no diffraction to see. */
#define MAX_SIZE 500.0
#define MAX_INTEGRATION 100.0
#define MAX_TIME_CONSTANT 1e9
/* Wider passbands reach towards zero wavelength. */
#define MAX_TOP_HAT 1.0
#define MAX_BAND_FWHM 0.5

struct curve {
	double direction;               /* w per second and its sign */
	size_t components;
	struct {
		double flux, delay;     /* share; seconds its contact is later */
		struct pattern pattern;
	} component[MAX_COMPONENTS];
};

static bool in_range(double value, double low, double high)
{
	return value >= low && value <= high;
}

static int check_component(const struct source_component *component, double scale_rad)
{
	if ((unsigned)component->shape > SHAPE_GAUSSIAN || !in_range(component->flux, 0.0, 1e30)
	    || !isfinite(component->offset_rad / scale_rad))
		return -EINVAL;
	if (component->shape == SHAPE_POINT)
		return 0;
	if (!in_range(component->size_rad / scale_rad, 0.0, MAX_SIZE))
		return -EINVAL;
	if (component->shape == SHAPE_LIMB_DARKENED_DISC && !in_range(component->limb_darkening, 0.0, 1.0))
		return -EINVAL;
	return 0;
}

static int check_passband(const struct curve_parameters *p)
{
	switch (p->passband.shape) {
	case PASSBAND_LINE:
		return 0;
	case PASSBAND_TOP_HAT:
		return in_range(p->passband.width_m / p->passband.wavelength_m, 0.0, MAX_TOP_HAT) ? 0 : -EINVAL;
	case PASSBAND_GAUSSIAN:
		return in_range(p->passband.width_m / p->passband.wavelength_m, 0.0, MAX_BAND_FWHM) ? 0 : -EINVAL;
	}
	return -EINVAL;
}

static int check_parameters(const struct curve_parameters *p)
{
	double scale = fresnel_scale(p->passband.wavelength_m, p->distance_m);
	double time = scale / p->speed_mps;
	double sum = 0.0;

	if ((p->kind != CONTACT_IMMERSION && p->kind != CONTACT_EMERSION) || !(scale > 0.0) || !(p->speed_mps > 0.0)
	    || !isnormal(time) || check_passband(p))
		return -EINVAL;
	if (!in_range(p->aperture_m / scale, 0.0, MAX_SIZE) || !(p->obstruction >= 0.0 && p->obstruction < 1.0))
		return -EINVAL;
	if (!in_range(p->integration_s / time, 0.0, MAX_INTEGRATION)
	    || !in_range(p->low_pass_s / time, 0.0, MAX_TIME_CONSTANT)
	    || !(p->high_pass_hz >= 0.0 && isfinite(p->high_pass_hz)))
		return -EINVAL;
	if (p->components < 1 || p->components > MAX_COMPONENTS)
		return -EINVAL;
	for (size_t i = 0; i < p->components; i++) {
		if (check_component(&p->component[i], scale / p->distance_m))
			return -EINVAL;
		sum += p->component[i].flux;
	}
	return sum > 0.0 ? 0 : -EINVAL;
}

double curve_fresnel_time(const struct curve_parameters *parameters)
{
	return fresnel_scale(parameters->passband.wavelength_m, parameters->distance_m) / parameters->speed_mps;
}

static struct spectrum component_spectrum(const struct curve_parameters *p, const struct source_component *component)
{
	double scale = fresnel_scale(p->passband.wavelength_m, p->distance_m);
	double size = component->size_rad * p->distance_m / scale;
	double width = p->passband.width_m / p->passband.wavelength_m;
	struct spectrum s = {
		.aperture = p->aperture_m / scale,
		.obstruction = p->obstruction,
		.box = p->integration_s / curve_fresnel_time(p),
	};

	if (component->shape == SHAPE_GAUSSIAN)
		s.gauss = size / FWHM_PER_SIGMA;
	else if (component->shape != SHAPE_POINT)
		s.disc = size;
	if (component->shape == SHAPE_LIMB_DARKENED_DISC)
		s.darkening = component->limb_darkening;
	if (p->passband.shape == PASSBAND_TOP_HAT)
		s.top_hat = width;
	else if (p->passband.shape == PASSBAND_GAUSSIAN)
		s.band_sigma = width / FWHM_PER_SIGMA;
	return s;
}

static int add_component(struct curve *curve, const struct curve_parameters *p, const struct source_component *component)
{
	double time = curve_fresnel_time(p);
	struct spectrum spectrum = component_spectrum(p, component);
	struct response response;
	double high_pass = p->high_pass_hz > 0.0 ? 1.0 / (2.0 * M_PI * p->high_pass_hz) / time : 0.0;
	int ret;

	response_init(&response, p->kind == CONTACT_EMERSION ? 1 : -1, p->low_pass_s / time,
	              fmin(high_pass, MAX_TIME_CONSTANT));
	ret = pattern_init(&curve->component[curve->components].pattern, &spectrum, &response);
	if (ret)
		return ret;
	curve->component[curve->components].flux = component->flux;
	curve->component[curve->components].delay = component->offset_rad * p->distance_m / p->speed_mps;
	curve->components++;
	return 0;
}

int curve_create(struct curve **out, const struct curve_parameters *parameters)
{
	struct curve *curve;
	double sum = 0.0;
	int ret = check_parameters(parameters);

	if (ret)
		return ret;
	curve = calloc(1, sizeof(*curve));
	if (!curve)
		return -ENOMEM;
	curve->direction = (parameters->kind == CONTACT_EMERSION ? 1.0 : -1.0) / curve_fresnel_time(parameters);
	for (size_t i = 0; i < parameters->components; i++)
		sum += parameters->component[i].flux;
	for (size_t i = 0; i < parameters->components; i++) {
		if (!(parameters->component[i].flux > 0.0))
			continue;
		ret = add_component(curve, parameters, &parameters->component[i]);
		if (ret)
			goto destroy_curve;
		curve->component[curve->components - 1].flux /= sum;
	}
	*out = curve;
	return 0;

destroy_curve:
	curve_destroy(curve);
	return ret;
}

void curve_destroy(struct curve *curve)
{
	if (!curve)
		return;
	for (size_t i = 0; i < curve->components; i++)
		pattern_release(&curve->component[i].pattern);
	free(curve);
}

double curve_value(const struct curve *curve, double t)
{
	double sum = 0.0;

	for (size_t i = 0; i < curve->components; i++)
		sum += curve->component[i].flux
		       * pattern_value(&curve->component[i].pattern, (t - curve->component[i].delay) * curve->direction);
	return sum;
}

void curve_sample(const struct curve *curve, double t0, double dt, size_t n, double *out)
{
	for (size_t k = 0; k < n; k++)
		out[k] = curve_value(curve, t0 + k * dt);
}

/* Energy about the mean over a window centred on the contact. */
static int energy_about_mean(const struct curve_parameters *parameters, double window_s, double *energy)
{
	enum { SAMPLES = 4096 };
	struct curve *curve;
	double mean = 0.0, square = 0.0;
	int ret = curve_create(&curve, parameters);

	if (ret)
		return ret;
	for (int k = 0; k < SAMPLES; k++) {
		double value = curve_value(curve, ((k + 0.5) / SAMPLES - 0.5) * window_s);
		double step = value - mean;

		mean += step / (k + 1);
		square += step * (value - mean);
	}
	curve_destroy(curve);
	*energy = square;
	return 0;
}

double curve_surviving_energy(const struct curve_parameters *parameters, double window_s)
{
	struct curve_parameters coupled = *parameters;
	double before, after;

	if (!(window_s > 0.0) || !isfinite(window_s))
		return NAN;
	coupled.high_pass_hz = 0.0;
	if (energy_about_mean(parameters, window_s, &after) || energy_about_mean(&coupled, window_s, &before))
		return NAN;
	return parameters->high_pass_hz > 0.0 ? after / before : 1.0;
}

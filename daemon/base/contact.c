/* SPDX-License-Identifier: GPL-3.0-or-later */
#include "limbwatch/contact.h"

#include <stddef.h>

const char *contact_kind_name(enum contact_kind kind)
{
	static const char *const name[CONTACT_KINDS] = {
		[CONTACT_IMMERSION] = "immersion", [CONTACT_EMERSION] = "emersion",
	};

	return (unsigned)kind < CONTACT_KINDS ? name[kind] : "unknown";
}

const char *verdict_name(enum verdict verdict)
{
	static const char *const name[] = {
		[VERDICT_STEP] = "step-like", [VERDICT_FRINGES] = "fringes confirmed",
	};

	return (size_t)verdict < sizeof(name) / sizeof(name[0]) ? name[verdict] : "unknown";
}

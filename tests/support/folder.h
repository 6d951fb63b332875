/* SPDX-License-Identifier: GPL-3.0-or-later */
#ifndef FOLDER_H
#define FOLDER_H

/* A folder of its own for a test: cmocka's setup and teardown. */
extern char folder[64];
int folder_make(void **state);
int folder_remove(void **state);

#endif

/* SPDX-License-Identifier: MIT
 *
 * A locale with a decimal comma, made with localedef, which is part of every Debian: locales that are installed differ
 * from machine to machine.
 */
#ifndef FESCUE_TESTS_SUPPORT_LOCALE_H
#define FESCUE_TESTS_SUPPORT_LOCALE_H

#include <locale.h>

/* New locale, made in `folder`; fails the test when it cannot be made. The caller frees it. */
locale_t comma_locale(const char *folder);

#endif

/* SPDX-License-Identifier: MIT
 *
 * A locale with a decimal comma.
 */
#include "support_locale.h"
#include "support.h"

#include <stdio.h>
#include <stdlib.h>

/* glibc 2.36 keeps the list it makes of LOCPATH; the leak checker asks here what is not ours. */
const char *__lsan_default_suppressions(void);
const char *__lsan_default_suppressions(void)
{
    return "leak:argz_add_sep";
}

locale_t comma_locale(const char *folder)
{
    char path[PATH_SIZE], command[3 * PATH_SIZE], printed[8];
    file_put_text(path_in(folder, "comma.src", path),
                  "LC_NUMERIC\ndecimal_point \",\"\nthousands_sep \"\"\ngrouping -1\nEND LC_NUMERIC\n");
    /* -c: the categories that are left out are warnings; its status says so too. */
    snprintf(command, sizeof command, "localedef -c --no-archive -i %s -f ANSI_X3.4-1968 %s/comma >/dev/null 2>&1",
             path, folder);
    int ended = system(command);
    assert_true(ended != -1);
    setenv("LOCPATH", folder, 1);
    locale_t locale = newlocale(LC_NUMERIC_MASK, "comma", (locale_t)0);
    unsetenv("LOCPATH");
    assert_true(locale != (locale_t)0);
    locale_t around = uselocale(locale);
    snprintf(printed, sizeof printed, "%.1f", 1.5);
    uselocale(around);
    assert_string_equal(printed, "1,5");
    return locale;
}

/* SPDX-License-Identifier: MIT
 *
 * Labels from standard input, one a line; for each a line "second nano has_offset", or "none".
 */
#include "table/table_internal.h"

#include <stdio.h>
#include <string.h>

int main(void)
{
    char text[256];
    while (fgets(text, sizeof text, stdin) != NULL) {
        struct instant instant;
        if (time_label_parse(text, text + strcspn(text, "\n"), &instant))
            printf("%lld %d %d\n", (long long)instant.second, (int)instant.nano, (int)instant.has_offset);
        else
            printf("none\n");
    }
    return 0;
}

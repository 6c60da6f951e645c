/* SPDX-License-Identifier: MIT
 *
 * malloc that may fail. The libraries underneath, CHOLMOD, SQLite and Jansson among them, take memory from malloc and
 * not from a context. These take its place for the whole program that includes this, once, and hand on to glibc's own,
 * unless the plan of faults says to fail; sanitizers have one of their own that must stay.
 */
#ifndef FESCUE_TESTS_SUPPORT_MALLOC_H
#define FESCUE_TESTS_SUPPORT_MALLOC_H

#include "support.h"

#include <stdlib.h>

#if defined(__SANITIZE_ADDRESS__) || defined(__SANITIZE_THREAD__)
#define HAS_OWN_MALLOC false
#elif defined(__has_feature)
#if __has_feature(address_sanitizer) || __has_feature(thread_sanitizer) || __has_feature(memory_sanitizer)
#define HAS_OWN_MALLOC false
#else
#define HAS_OWN_MALLOC true
#endif
#else
#define HAS_OWN_MALLOC true
#endif

#if HAS_OWN_MALLOC
void *__libc_malloc(size_t size);
void *__libc_calloc(size_t count, size_t size);
void *__libc_realloc(void *block, size_t size);

void *malloc(size_t size)
{
    return fault_due(FAULT_MALLOC) ? NULL : __libc_malloc(size);
}

void *calloc(size_t count, size_t size)
{
    return fault_due(FAULT_MALLOC) ? NULL : __libc_calloc(count, size);
}

void *realloc(void *block, size_t size)
{
    return fault_due(FAULT_MALLOC) ? NULL : __libc_realloc(block, size);
}
#endif

#endif

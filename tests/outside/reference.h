/* reference: relative references against a base, RFC 3986 section 5.2, strict. For the tests' own
 * web builder (hyperlinks.c): the program itself reads absolute URLs only.
 */
#ifndef TESTS_OUTSIDE_REFERENCE_H
#define TESTS_OUTSIDE_REFERENCE_H

/* The URI that `reference` stands for in a document at `base`. Owned by the caller, freed with free(). */
char *reference_resolve(const char *base, const char *reference);

/* RFC 3986 section 5.2.4, in place. */
void reference_remove_dot_segments(char *path);

#endif

/* progress: shows how far a long job is, and lets signals end it at a checkpoint.
 *
 * On a terminal one line is redrawn, clipped to its width; elsewhere a plain line is written every few
 * seconds; nothing with --quiet. The first SIGINT or SIGTERM raises the wish to stop, the second one acts
 * as it does on any program. There is one progress at a time.
 */
#ifndef TOOLS_PROGRESS_H
#define TOOLS_PROGRESS_H

#include "windrow.h"

/* Fills `watch` and takes over the signals. `command` must outlive the job. */
void progress_begin(const char *command, struct windrow_watch *watch);
/* Clears the line, gives the signals back. */
void progress_end(void);

#endif

/* fault: what a mapped file that cannot be read any more does to the program. */
#ifndef WINDROW_TOOLS_FAULT_H
#define WINDROW_TOOLS_FAULT_H

/* From here on, a read of a mapped file that fails (the file was cut, the disk is full or broken) ends the program
 * with exit code 4 and a line that names the file, in place of a bare SIGBUS. */
void fault_watch(void);

#endif

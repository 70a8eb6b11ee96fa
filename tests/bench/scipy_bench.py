"""The same ranking by power iteration on a sparse matrix of SciPy, which is in memory before the clock starts.

    scipy_bench.py DIRECTORY BETA ERROR

DIRECTORY is what arrays_bench wrote. Stops when the change proves the wanted L1 error. Prints seconds, CPU
seconds, peak resident memory in bytes while iterating, and iterations, a line each.
"""
import re
import sys
import time

import numpy
import scipy.sparse

directory, beta, error = sys.argv[1], float(sys.argv[2]), float(sys.argv[3])
starts = numpy.fromfile(directory + "/starts", dtype=numpy.int64)
sources = numpy.fromfile(directory + "/sources", dtype=numpy.int32)
degrees = numpy.fromfile(directory + "/degrees", dtype=numpy.int32)
pages = len(degrees)
if len(sources) < 2**31:
    starts = starts.astype(numpy.int32)
shares = 1.0 / degrees[sources]
matrix = scipy.sparse.csr_matrix((shares, sources, starts), shape=(pages, pages), copy=False)
dangling = numpy.flatnonzero(degrees == 0)
del shares, starts, degrees

with open("/proc/self/clear_refs", "w") as clear:
    clear.write("5")
began, cpu = time.monotonic(), time.process_time()
scores = numpy.full(pages, 1.0 / pages)
iterations = 0
while True:
    new = matrix @ scores
    new *= beta
    new += (1.0 - beta + beta * scores[dangling].sum()) / pages
    change = numpy.abs(new - scores).sum()
    scores = new
    iterations += 1
    if change * beta / (1.0 - beta) <= error:
        break
print(f"{time.monotonic() - began:.3f}")
print(f"{time.process_time() - cpu:.3f}")
with open("/proc/self/status") as status:
    print(int(re.search(r"VmHWM:\s+(\d+) kB", status.read()).group(1)) * 1024)
print(iterations)

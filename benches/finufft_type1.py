"""Time of finufft's type 1 transform on given points: prints seconds, the best of a few calls, per number of threads.

Arguments: folder with x.f64, y.f64 (radians per pixel) and c.c64 (strengths), image width, image height, eps.
"""
import json
import sys
import time

import finufft
import numpy as np

folder, width, height, eps = sys.argv[1], int(sys.argv[2]), int(sys.argv[3]), float(sys.argv[4])
x = np.fromfile(f"{folder}/x.f64", dtype=np.float64).astype(np.float32)
y = np.fromfile(f"{folder}/y.f64", dtype=np.float64).astype(np.float32)
c = np.fromfile(f"{folder}/c.c64", dtype=np.complex64)
out = {}
for threads in (1, 2):
    best = float("inf")
    for _ in range(4):
        started = time.perf_counter()
        finufft.nufft2d1(x, y, c, (width, height), isign=1, eps=eps, nthreads=threads)
        best = min(best, time.perf_counter() - started)
    out[str(threads)] = best
print(json.dumps(out))

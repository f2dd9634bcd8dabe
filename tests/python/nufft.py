"""With unity beams the adjoint is a type-1 non-uniform transform: response sums against finufft.

Per case: visibilities (u, v in wavelengths, w = 0, complex value, weight) and N at every pixel of an image, `[y][x]`.
The image is orthographic and flat in (l, m), so pixel (x, y) lies at l = −(x − x0)·pixel, m = (y − y0)·pixel.
"""

import finufft
import numpy as np

from checks import Checks, load, numbers

checks = Checks()
for case in load()["cases"]:
    width, height, pixel = case["width"], case["height"], case["pixel"]
    u, v, weight = numbers(case["u"]), numbers(case["v"]), numbers(case["weight"])
    strength = weight * (numbers(case["re"]) + 1j * numbers(case["im"]))
    # exp(+2πi(u l + v m)) with l = −pixel·i, m = pixel·j; mode numbers run from −(n/2) as pixels do
    x, y = -2 * np.pi * u * pixel, 2 * np.pi * v * pixel
    fold = lambda t: np.mod(t + np.pi, 2 * np.pi) - np.pi
    modes = finufft.nufft2d1(fold(x), fold(y), strength, (width, height), eps=1e-13, isign=1)
    want = modes.real.T
    got = numbers(case["numerator"]).reshape(height, width)
    # finufft reaches about 1e-12 of the summed strengths (measured against direct sums)
    error = np.linalg.norm(got - want) / np.linalg.norm(want)
    checks.within(f"{case['name']}: relative L2 error", error, case["bound"])
    checks.within(f"{case['name']}: normaliser", numbers(case["normaliser"]) / weight.sum() - 1, case["bound"])
checks.finish()

"""Comparisons with bounds, and the closing line that tests/python_references.rs waits for."""

import json
import sys

import numpy as np


def load():
    """The numbers of the program under test: the JSON file named by the first argument. A NaN arrives as None."""
    with open(sys.argv[1], encoding="utf-8") as file:
        return json.load(file)


def numbers(values):
    """An array of floats; None (a NaN or infinity of the program under test) becomes NaN, which no comparison passes."""
    return np.array(values, dtype=float)


class Checks:
    """Collects comparisons; `finish` prints the worst of each beside its bound and ends the process."""

    def __init__(self):
        self.count = 0
        self.failures = 0

    def within(self, name, errors, bound):
        """Every one of `errors` must be at most `bound` in size."""
        errors = np.abs(np.atleast_1d(numbers(errors))).ravel()
        bad = ~(errors <= bound)
        if errors.size == 0:
            print(f"{name}: FAILED, nothing to compare")
            self.failures += 1
            return
        worst = np.max(np.where(np.isnan(errors), np.inf, errors))
        verdict = f"FAILED, {int(bad.sum())} of {errors.size}, first at {int(np.argmax(bad))}" if bad.any() else "good"
        print(f"{name}: worst {worst:.3g}, bound {bound:.3g}, {errors.size} values: {verdict}")
        self.count += errors.size
        self.failures += int(bad.any())

    def close(self, name, got, want, bound):
        """|got − want| ≤ bound, value by value."""
        got, want = np.atleast_1d(numbers(got)), np.atleast_1d(numbers(want))
        if got.shape != want.shape:
            print(f"{name}: FAILED, shapes {got.shape} and {want.shape}")
            self.failures += 1
            return
        self.within(name, got - want, bound)

    def true(self, name, condition, detail=""):
        """A yes or no."""
        print(f"{name}: {'good' if condition else 'FAILED ' + str(detail)}")
        self.count += 1
        self.failures += int(not condition)

    def finish(self):
        """Ends the process: status 0 only when something was compared and nothing disagreed."""
        if self.failures or not self.count:
            print(f"{self.failures} of the comparisons above disagree ({self.count} values compared)")
            sys.exit(1)
        print(f"agreed: {self.count} values")
        sys.exit(0)

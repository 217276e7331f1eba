"""What the peer tests share: running the binary, NPY in and out, a tally that fails at the end."""
import json
import os
import subprocess
import sys

import numpy as np

BINARY = os.environ["REGAUGE_BINARY"]
FOLDER = os.environ["REGAUGE_FOLDER"]
checks = []


def path(name):
    return os.path.join(FOLDER, name)


def regauge(*arguments, expect=0):
    done = subprocess.run([BINARY, *map(str, arguments)], capture_output=True, text=True, check=False)
    if done.returncode != expect:
        sys.exit(f"regauge {' '.join(map(str, arguments))}: exit {done.returncode}\n{done.stderr}")
    return done


def through(a, *arguments, name="in.npy"):
    """The array after `regauge COMMAND in out OPTIONS`, by way of NPY files."""
    np.save(path(name), a)
    out = path("out.npy")
    command, *options = arguments
    regauge(command, path(name), out, *options, "--overwrite", "--quiet")
    return np.load(out)


def check(what, got, wanted, bound):
    """Notes the largest difference, NaN poisoning it, as a share of the largest wanted value."""
    got, wanted = np.asarray(got, float), np.asarray(wanted, float)
    if got.shape != wanted.shape:
        checks.append((what, f"shape {got.shape} instead of {wanted.shape}", False))
        return
    scale = max(np.abs(wanted).max(), 1e-300)
    worst = np.abs(got - wanted).max() / scale
    checks.append((what, f"{worst:.2e} (bound {bound:.0e})", bool(worst <= bound)))


def true(what, holds):
    checks.append((what, "holds" if holds else "does not hold", bool(holds)))


def conclude():
    bad = [c for c in checks if not c[2]]
    for what, said, fine in checks:
        if not fine:
            print("FAILED", what, said)
    print(json.dumps({"checks": len(checks), "failed": len(bad)}))
    sys.exit(1 if bad or not checks else 0)

# Estimates and HC1 or classical errors by their definition with numpy, from an
# f64 file (a constant, the terms, the outcome, column after column) that is read
# before the clock starts. One argument, JSON: {file, columns, errors, workers}.
# Each worker is a thread with a part of the rows; BLAS itself should have one
# thread, since blocks that fit the cache are too small to share.
import json
import os
import sys
import time
from concurrent.futures import ThreadPoolExecutor

import numpy as np

task = json.loads(sys.argv[1])
p, workers = task["columns"], task["workers"]
z = np.fromfile(task["file"]).reshape(p, -1)
n, k = z.shape[1], p - 1
block = 8192  # rows; the fastest of 512 to 131072 at ten columns


def outer(rows, scale, worker):
    m = np.zeros((rows, rows))
    end = n * (worker + 1) // workers
    for at in range(n * worker // workers, end, block):
        b = z[:, at : min(at + block, end)]
        if scale is not None:
            b = b[:rows] * (scale @ b)
        m += b @ b.T
    return m


def total(rows, scale):
    return sum(pool.map(lambda w: outer(rows, scale, w), range(workers)))


with ThreadPoolExecutor(workers) as pool:
    start = time.perf_counter()
    gram = total(p, None)
    beta = np.linalg.solve(gram[:k, :k], gram[:k, k])
    bread = np.linalg.inv(gram[:k, :k])
    residual = np.append(-beta, 1.0)
    if task["errors"] == "hc1":
        v = bread @ total(k, residual) @ bread * (n / (n - k))
    elif task["errors"] == "classical":
        v = bread * (residual @ gram @ residual / (n - k))
    else:
        sys.exit("no errors " + task["errors"])
    se = np.sqrt(np.diag(v))
    seconds = time.perf_counter() - start

with open("/proc/self/maps") as maps:
    files = {os.path.basename(line.split()[-1]) for line in maps if "blas" in line}
blas = " ".join(sorted(f for f in files if "openblas" in f) or sorted(files))
print(json.dumps({"seconds": seconds, "rows": n, "beta": beta.tolist(), "se": se.tolist(),
                  "notes": {"blas": blas}}))

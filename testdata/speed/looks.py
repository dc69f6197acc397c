"""The upper p-value of every look of daily series by rolling windows, with SciPy.

    python3 looks.py HISTORY.csv SERIES RATE DAYS...

HISTORY.csv has the columns series, date, events, exposure, day by day, every
series each day and in the same order, which is checked and spares sorting. A look
is the sum of a window; its p-value P(X >= N), X ~ Poisson(RATE x exposure), is
computed once for each distinct pair of count and mean, all pairs in one call.
Prints, as JSON, the seconds of processor time for reading and for the p-values,
how many there are, their sum, and how many are at most 0.1, 0.05, 0.01, 0.001
and 0.0001.
"""
import json
import sys
import time

import numpy as np
from scipy.stats import poisson

path, series, rate = sys.argv[1], int(sys.argv[2]), float(sys.argv[3])
start = time.process_time()
rows = np.loadtxt(path, delimiter=",", skiprows=1,
                  dtype=[("series", "S24"), ("date", "S10"), ("events", np.int64), ("exposure", np.int64)])
names, dates = rows["series"].reshape(-1, series), rows["date"].reshape(-1, series).astype("M8[D]")
assert (names == names[0]).all() and (dates == dates[:, :1]).all() and (np.diff(dates[:, 0]) == np.timedelta64(1, "D")).all()
events, exposure = (np.cumsum(rows[x].reshape(-1, series), axis=0) for x in ("events", "exposure"))
read = time.process_time()
looks, total, at_most = 0, 0.0, np.zeros(5, dtype=np.int64)
for days in map(int, sys.argv[4:]):
    def rolling(sums):
        w = sums[days - 1:].copy()
        w[1:] -= sums[:-days]
        return w.ravel()

    n, e = rolling(events), rolling(exposure)
    width = int(e.max()) + 1
    pairs, where = np.unique(n * width + e, return_inverse=True)
    p = poisson.sf(pairs // width - 1, (pairs % width) * rate)[where]
    looks += p.size
    total += float(p.sum())
    at_most += [int((p <= x).sum()) for x in (0.1, 0.05, 0.01, 0.001, 0.0001)]
end = time.process_time()
print(json.dumps({"read": read - start, "p": end - read, "looks": looks, "sum": total, "at_most": at_most.tolist()}))

#!/usr/bin/python3
"""The loop a textbook would write, as fast as numpy does it: single precision, 500 scenarios at a
time, a process a core.

    textbook.py FOLDER

Reads a book from FOLDER: `shape` (names and factors) and, as 32 bit floats, `loading` (names x
factors), `own` (sqrt(1 - rho)), `threshold` and `loss`. Prints scenarios, seconds and the mean loss
as a check. A loss is

    sum over names of loss 1(loading Z + own e < threshold)      Z, e independent standard normals

and nothing is kept of which name lost what, which contributions would need besides.
"""

import os

for library in ("OMP", "OPENBLAS", "MKL"):  # a process is a core
    os.environ[library + "_NUM_THREADS"] = "1"

import multiprocessing
import pathlib
import sys
import time

import numpy

BLOCK = 500
BLOCKS = 20  # a process

folder = pathlib.Path(sys.argv[1])
names, factors = map(int, (folder / "shape").read_text().split())


def read(name):
    return numpy.fromfile(folder / name, dtype=numpy.float32)


loading = read("loading").reshape(names, factors)
own, threshold, loss = read("own")[:, None], read("threshold")[:, None], read("loss")


def losses(generator):
    returns = generator.standard_normal((names, BLOCK), dtype=numpy.float32)
    returns *= own
    returns += loading @ generator.standard_normal((factors, BLOCK), dtype=numpy.float32)
    return loss @ (returns < threshold).astype(numpy.float32)


def process(seed, start, results):
    generator = numpy.random.Generator(numpy.random.SFC64(seed))
    losses(generator)  # what the first one costs more is not counted
    start.wait()
    began = time.monotonic()
    total = sum(losses(generator).sum(dtype=numpy.float64) for _ in range(BLOCKS))
    results.put((began, time.monotonic(), total))


if __name__ == "__main__":
    cores = len(os.sched_getaffinity(0))
    context = multiprocessing.get_context("fork")
    start, results = context.Barrier(cores), context.Queue()
    workers = [context.Process(target=process, args=(seed, start, results)) for seed in range(cores)]
    for worker in workers:
        worker.start()
    began, ended, total = zip(*(results.get() for _ in workers))
    for worker in workers:
        worker.join()
    scenarios = cores * BLOCKS * BLOCK
    print(scenarios, max(ended) - min(began), sum(total) / scenarios)

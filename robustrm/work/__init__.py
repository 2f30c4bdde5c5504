"""Long work in blocks: here, in other processes, or on a cluster; stopped and resumed.

The rooms, in the order a job passes through them::

    kept            finished blocks in a folder, each whole or not there at all
    blocks          run_blocks: what is asked for and not kept goes out; lost blocks go out again
    workers         processes of this machine, replaced when one is lost
    cluster         the workers of a cluster that is already there
"""

from robustrm.work.blocks import Job, Progress, run_blocks
from robustrm.work.cluster import cluster
from robustrm.work.kept import Block
from robustrm.work.workers import Workers, workers

__all__ = ["Block", "Job", "Progress", "Workers", "cluster", "run_blocks", "workers"]

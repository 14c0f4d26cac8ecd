"""The job file: what to make, for which qubit, on which bench."""

from shaper.job.record import Job as Job
from shaper.job.record import parse_job as parse_job
from shaper.job.record import read_job as read_job

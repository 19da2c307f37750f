"""Job files: what stands in them, how they are read and checked, the plan they freeze to. No link, no instrument."""

from sweeprig.job.freeze import freeze
from sweeprig.job.frozen_text import document, job_hash
from sweeprig.job.loader import load
from sweeprig.job.models import Job
from sweeprig.job.shipped import shipped

__all__ = ["Job", "document", "freeze", "job_hash", "load", "shipped"]

"""The command line: parse, one library call, print. Only this room and `terminal` print, only this one exits."""

from sweeprig.cli import bench, jobs, pages, rigs, runs
from sweeprig.cli.base import cli, main

__all__ = ["bench", "cli", "jobs", "main", "pages", "rigs", "runs"]

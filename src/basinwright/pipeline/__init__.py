"""The one place that knows the order: a project in, a run folder out."""

from basinwright.outputs.summary import Outcome
from basinwright.pipeline.running import check, copy_sample, report, retime, run, start

__all__ = ["Outcome", "check", "copy_sample", "report", "retime", "run", "start"]

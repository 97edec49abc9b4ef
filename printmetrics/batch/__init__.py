"""Many pictures: worker processes, tables, drawings."""

from printmetrics.batch.folder import Plan, RunSummary, Tally, measure_folder, plan_run

__all__ = ["Plan", "RunSummary", "Tally", "measure_folder", "plan_run"]

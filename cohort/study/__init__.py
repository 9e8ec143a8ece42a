"""Study file -> checked Study -> plan. Runs nothing."""

from cohort.study.load import load_study, study_from
from cohort.study.plan import Plan, describe, plan
from cohort.study.spec import Output, Study

__all__ = ["Output", "Plan", "Study", "describe", "load_study", "plan", "study_from"]

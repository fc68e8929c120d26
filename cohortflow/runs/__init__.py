"""One forecast, one folder: made in steps, written whole, repeatable byte for byte."""

from cohortflow.runs.demo import write_demo as write_demo

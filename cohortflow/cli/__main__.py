"""`python -m cohortflow.cli` is `cohortflow`."""

from cohortflow.cli import main

main()

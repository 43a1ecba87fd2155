"""Random trials against exact truth; `python -m tests.trials NAME` makes the tables of docs/trials.md."""

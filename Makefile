# Everything is done by tasks.py, so that machines without make have it too.
PYTHON ?= python3

.PHONY: dryrun test soak bench format
dryrun test soak bench format:
	$(PYTHON) tasks.py $@

# Every target builds .venv by itself when needed; steps.py does the work.
PYTHON ?= python3

.PHONY: demo test test-long bench clean
demo test test-long bench clean:
	@$(PYTHON) steps.py $@

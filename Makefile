# Every target sets up what it needs; see .ci/setup. Results go to build/.
.PHONY: help demo test lint types unit matrix fuzz bench calibrate zip clean setup-demo setup-test

SYSTEM_PYTHON = $${DOWNWARP_PYTHON:-/usr/bin/python3}
PYTHON = .venv/bin/python
# An earlier choice of the user's stands: xcb shows the windows that tests open.
export QT_QPA_PLATFORM ?= offscreen

help:
	@echo 'make demo       make the demo layers, fit them, compare with the truth; layers in build/demo'
	@echo 'make test       lint, types and all tests'
	@echo 'make matrix     all tests in other releases of QGIS, each in a Debian of its own'
	@echo 'make fuzz       20,000 hostile runs and 100 that are killed; some 20 minutes'
	@echo 'make bench      speed beside general libraries, QGIS and GDAL, and of runs of many transects'
	@echo 'make calibrate  how often the intervals hold the truth'
	@echo 'make zip        the plugin as QGIS installs it, in build/'
	@echo 'make clean      remove build/, .venv and caches'

setup-demo:
	@sh .ci/setup demo

setup-test:
	@sh .ci/setup test

demo: setup-demo
	@$(SYSTEM_PYTHON) tests/tools/demo.py build/demo

test: setup-test lint types unit

lint: setup-test
	.venv/bin/ruff check .
	.venv/bin/flake8 --config .ci/flake8 __init__.py plugin algorithms tests
	.venv/bin/bandit --quiet --configfile pyproject.toml --recursive __init__.py plugin algorithms
	$(PYTHON) tests/tools/qt6.py __init__.py plugin algorithms tests

# mypy wants a package name, which the checkout's own folder name need not be.
types: setup-test
	@mkdir -p build/types && ln -sfn ../.. build/types/downwarp
	cd build/types && ../../.venv/bin/mypy --config-file downwarp/pyproject.toml -p downwarp.plugin -p downwarp.algorithms

# Matrices are small: threads of linear algebra only get into each other's way.
unit: setup-test
	@mkdir -p build
	OPENBLAS_NUM_THREADS=1 $(PYTHON) -m pytest --junit-xml=build/tests.xml

matrix:
	@$(SYSTEM_PYTHON) tests/tools/matrix.py

fuzz: setup-test
	@$(PYTHON) tests/fuzz/campaign.py --cases 20000 --log build/fuzz.jsonl
	@$(PYTHON) tests/fuzz/kills.py --kills 100

bench: setup-test
	@$(PYTHON) tests/bench/run.py
	@$(PYTHON) tests/bench/sampling.py
	@$(PYTHON) tests/bench/many.py
	@rm -rf build/bench-window && mkdir -p build && $(PYTHON) tests/window/play.py build/bench-window starts draws slides slides_on_many_stations

calibrate: setup-test
	@$(PYTHON) tests/calibration/run.py

zip:
	@$(SYSTEM_PYTHON) tests/tools/package.py build

clean:
	rm -rf build .venv .mypy_cache .ruff_cache .pytest_cache .hypothesis
	find . -name __pycache__ -type d -prune -exec rm -rf {} +

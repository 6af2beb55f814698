"""python -m sim_sensors."""

import sys

from sim_sensors.cli import main

sys.exit(main())

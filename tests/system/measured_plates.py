"""The plates of the measured records, with places for what is fitted, and their columns."""

from __future__ import annotations

from platewatch.monitor.options import CAUSE_NAMES

START = "2026-03-01T08:00:00Z"
# Naming causes is not asked here, and would take most of the time.
NO_CAUSES = f"[causes]\noff = {list(CAUSE_NAMES)}\n"

LAMP_PLATE = """
[plate]
name = "lamp-plate"
outline = {{ shape = "rectangle", width_mm = 100, height_mm = 100 }}
thickness_mm = 1
material = "mild steel"
cell_mm = 10
[[material]]
name = "mild steel"
k = 48.0
rho = 7850.0
cp = 490.0
emissivity = 0.8
source = "of the size of handbook values"
[surface.top]
correlation = "natural-up"
emissivity = {emissivity}
ambient = 22.0
[surface.bottom]
coefficient = {loss}
ambient = 22.0
[[zone]]
name = "lamp"
shape = {{ shape = "circle", x_mm = 50, y_mm = 50, diameter_mm = 40 }}
watts = {watts}
lag_s = {lag}
duty = "0..1"
duty_law = "power"
duty_exponent = {exponent}
[[sensor]]
name = "T1"
x_mm = 50
y_mm = 50
element = "K"
signal = "degC"
tolerance_class = "2"
lag_s = 2
noise = 0.2
quantum = 0.244
[estimator]
tick_s = 2.0
"""
LAMP_COLUMNS = f"""
delimiter = "whitespace"
header = false
[time]
column = "1"
format = "s"
origin = "{START}"
[[column]]
column = "2"
name = "zone/lamp/duty"
scale = {1 / 9!r}
[[column]]
column = "3"
name = "sensor/T1"
"""

BOARD = """
[plate]
name = "board"
outline = {{ shape = "rectangle", width_mm = 60, height_mm = 30 }}
thickness_mm = {thickness}
material = "board"
cell_mm = 3
[[material]]
name = "board"
k = {k}
rho = 2700.0
cp = 900.0
emissivity = 0.9
source = "stands for board and metal together; k and thickness are fitted"
[surface.top]
coefficient = {loss}
ambient = {ambient}
[surface.bottom]
coefficient = 0.0
ambient = {ambient}
[[zone]]
name = "Q1"
shape = {{ shape = "rectangle", x_mm = 5, y_mm = 5, width_mm = 20, height_mm = 20 }}
watts = {watts_1}
lag_s = {lag}
duty = "0..100"
[[zone]]
name = "Q2"
shape = {{ shape = "rectangle", x_mm = 35, y_mm = 5, width_mm = 20, height_mm = 20 }}
watts = {watts_2}
lag_s = {lag}
duty = "0..100"
[[sensor]]
name = "T1"
x_mm = 15
y_mm = 15
signal = "degC"
element = "pt100"
lag_s = {lag}
noise = {noise}
[[sensor]]
name = "T2"
x_mm = 45
y_mm = 15
signal = "degC"
element = "pt100"
lag_s = {lag}
noise = {noise}
[estimator]
tick_s = 3.0
"""
BOARD_COLUMNS = f"""
[time]
column = "Time (sec)"
format = "s"
origin = "{START}"
[[column]]
column = "Heater 1"
name = "zone/Q1/duty"
[[column]]
column = "Heater 2"
name = "zone/Q2/duty"
[[column]]
column = "Temperature 1"
name = "sensor/T1"
[[column]]
column = "Temperature 2"
name = "sensor/T2"
"""

CONE = """
[plate]
name = "cone"
outline = {{ shape = "rectangle", width_mm = 100, height_mm = 100 }}
thickness_mm = 0.7
material = "nickel alloy"
cell_mm = 10
[[material]]
name = "nickel alloy"
k = 15.0
rho = 8400.0
cp = 450.0
emissivity = 0.9
source = "of the size of handbook values, from memory"
[surface.top]
correlation = "natural-up"
emissivity = {emissivity}
ambient = 23.9
[surface.bottom]
coefficient = {loss}
ambient = 23.9
[[zone]]
name = "cone"
shape = {{ shape = "rectangle", x_mm = 0, y_mm = 0, width_mm = 100, height_mm = 100 }}
watts = {watts}
lag_s = {lag}
duty = "0..1"
[[sensor]]
name = "T1"
x_mm = 50
y_mm = 50
element = "K"
signal = "degC"
tolerance_class = "2"
lag_s = 2
noise = 0.3
[estimator]
tick_s = 5.0
"""
CONE_COLUMNS = f"""
[time]
column = "Time"
format = "s"
origin = "{START}"
[[column]]
column = "Temp"
name = "sensor/T1"
[[column]]
column = "duty"
name = "zone/cone/duty"
"""

MACHINE = """
[plate]
name = "machine"
outline = { shape = "rectangle", width_mm = 400, height_mm = 300 }
thickness_mm = 20
material = "mild steel"
cell_mm = 30
[[material]]
name = "mild steel"
k = 48.0
rho = 7850.0
cp = 490.0
emissivity = 0.8
source = "of the size of handbook values"
[surface.top]
coefficient = 15.0
ambient = 22.0
[surface.bottom]
coefficient = 5.0
ambient = 22.0
[[zone]]
name = "Z1"
shape = { shape = "rectangle", x_mm = 50, y_mm = 50, width_mm = 300, height_mm = 200 }
watts = 300
duty = "0..1"
[[sensor]]
name = "T1"
x_mm = 200
y_mm = 150
element = "K"
signal = "degC"
lag_s = 10
[estimator]
tick_s = 600
late_s = 0
[forecast]
horizon_min = 15
step_s = 450
every_s = 600
"""
MACHINE_COLUMNS = """
[time]
column = "timestamp"
offset = "Z"
[[column]]
column = "value"
name = "sensor/T1"
"""

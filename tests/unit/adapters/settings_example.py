"""A description with every key of the contract, invented, for the settings tests."""

from __future__ import annotations

EXAMPLE = """\
[plate]
name = "bench"
unit = "degC"
outline = { shape = "rectangle", width_mm = 500, height_mm = 300 }
holes = [{ shape = "circle", x_mm = 250, y_mm = 30, diameter_mm = 20 }]
thickness_mm = 12
material = "own-iron"
cell_mm = 10
working_margin_mm = 20
position_note = "from the door"

[[material]]
name = "own-iron"
k = [[20, 50.0], [220, 46.0]]
rho = 7200.0
cp = 510.0
emissivity = 0.65
source = "invented"

[uncertain]
k = 0.06
losses = 0.2
power = 0.08
emissivity = 0.25

[surface.top]
correlation = "natural-up"
ambient = "surround/ambient"
[surface.bottom]
coefficient = 3.0
ambient = 24.0

[[edge]]
kind = "convective"
coefficient = 9.0
[[edge]]
kind = "held"
side = "x-max"
temperature = "surround/frame"

[[clamp]]
x_mm = 0
y_mm = 150
w_per_k = 0.4

[[zone]]
name = "Za"
shape = { shape = "rectangle", x_mm = 20, y_mm = 20, width_mm = 220, height_mm = 260 }
watts = 650.0
lag_s = 22
duty = "0..1"
duty_law = "burst"
loop = { sensor = "S1", gain = 0.05, integral_s = 450, low = 0.1, high = 0.9 }
where = "breaker Q7"

[[zone]]
name = "Zb"
shape = [
  { shape = "rectangle", x_mm = 260, y_mm = 20, width_mm = 220, height_mm = 120 },
  { shape = "rectangle", x_mm = 260, y_mm = 160, width_mm = 220, height_mm = 120 },
]
watts = 640.0
duty = "0..100"
duty_law = "power"
duty_exponent = 1.5
loop = { sensor = "S2", gain = 0.04, integral_s = 400, derivative_s = 5, form = "series" }

[[sensor]]
name = "S1"
x_mm = 130
y_mm = 150
element = "K"
signal = "degC"
tolerance_class = "2"
lag_s = 5
noise = 0.3
quantum = 0.2
role = "control"
junction_block = "J2"
correction = 0.4
calibrated_on = 2026-01-15
due_on = 2027-01-15
certificate = "c-8"
where = "terminal 4"

[[sensor]]
name = "S2"
x_mm = 370
y_mm = 80
element = "N"
signal = "mV"
cold_junction = "surround/cabinet"
tolerance_class = "1"
role = "control"

[[sensor]]
name = "S3"
x_mm = 440
y_mm = 250
element = "pt100"
signal = "mA"
span = [0, 400]
tolerance_class = "B"

[[sensor]]
name = "S4"
x_mm = 60
y_mm = 60
element = "J"
signal = "mV"
cold_junction = 31.0

[[alarm_limit]]
name = "resin"
kind = "peak"
value = 162.0
priority = "medium"
deadband = 2.5
cause = "zone fault"
consequence = "scrap"
response = "lower the set-point"
time_to_respond_min = 6
on_delay_s = 5
off_delay_s = 20
[[alarm_limit]]
name = "cold"
kind = "low"
value = 120.0
priority = "low"
zone = "Za"
steps = ["soak"]
record_only = true

[estimator]
tick_s = 1.0
late_s = 3.0
[forecast]
horizon_min = 12
step_s = 5
every_s = 10
[causes]
off = ["swapped pair"]
prior = { "cold load" = 0.02, loose = 0.01 }

[bus]
host = "broker.example"
port = 8883
user = "watcher"
secret_file = "/etc/bench/secret"
ca_file = "/etc/bench/ca.pem"
client_name = "bench-pc"
publish = true
keepalive_s = 20
[[channel]]
topic = "line1/te-7"
means = "sensor/S1"
payload = "json"
value = "data.v"
time = "data.t"
time_unit = "ms"
[[channel]]
topic = "line1/all"
means = "readings"
payload = "senml"

[store]
url = "sqlite:///bench.sqlite"
keep_days = 300
[screen]
address = "127.0.0.1:8500"
timezone = "Europe/Madrid"
[people]
"early shift" = "operator"
Q = "engineer"

[[recipe]]
name = "cure-140"
steps = [
  { do = "ramp", to = 140.0, rate_per_min = 6.0 },
  { do = "wait", within = 3.0, longest_min = 20 },
  { do = "soak", minutes = 45, spread_limit = 8.0 },
  { do = "cool", to = 50.0 },
]
[[contact]]
name = "tool"
shape = { shape = "circle", x_mm = 130, y_mm = 150, diameter_mm = 100 }
conductance = 350.0
heat_capacity = 4100.0

[[layer]]
material = "stainless-304"
thickness_mm = 1.5
[[inset]]
shape = { shape = "rectangle", x_mm = 230, y_mm = 130, width_mm = 40, height_mm = 40 }
material = "copper"
thickness_mm = 14
"""

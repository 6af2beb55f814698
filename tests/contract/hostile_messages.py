"""Messages as an enemy or a broken gateway sends them, from a seed."""

from __future__ import annotations

import random

from tests.contract.second_reading import NOW, UNITS

# fmt: off
NUMBERS = [
    "NaN", "Infinity", "-Infinity", "nan", "inf", "1e999", "-1e999", "1e400", "1e308",
    "1.7976931348623157e308", "-0", "-0.0", "0.0", "0", "1E+2", "1e+02", "2.5e1", "1e-400",
    "5e-324", "1e-1", "01", "+1", "1.", ".5", "0x1F", "1_000", "1,5", "-1", "--1", "-", "e1",
    "1e", "120.5", "121.3", "0.45", "1.001", "1.0011", "-273.15", "-273.16", "3000", "3000.1",
    "4294967296", "9007199254740993", "9223372036854775807", "18446744073709551616", "true",
    "false", "null", '"121.3"', '""', "[121.3]", "{}", "[]", '{"v":1}', "\uff11\uff12", "\u0661",
    "12", "1e1e1", "1..2", "120.50000000000000000000000000000000000001",
]
# fmt: on
NUMBERS += ["9" * 30, "1" + "0" * 308, "1" + "0" * 309, "9" * 400, "9" * 5000, "0." + "0" * 400]
NUMBERS += ["[" * 15 + "]" * 15, "[" * 40 + "]" * 40, "[" * 2000 + "1", '{"a":' * 1200 + "1"]
GOOD = ["120.5", "121.25", "0.45", "0", "1", "22", "119.99999999999999", "1.2e2", "0.5"]
TIMES = [
    str(NOW),
    str(NOW // 1000),
    str(NOW // 10**6),
    f"{NOW}.0",
    str(NOW + 120_000_000),
    str(NOW + 120_000_001),
    str(NOW // 1000 - 2000),
    "0",
    "-5",
    "-0.0",
    "5",
    "268435455",
    "268435456",
    "1772351990.25",
    "-1e300",
    "1e300",
    '"2026-03-01T08:00:00Z"',
    '"2026-03-01T09:00:00+01:00"',
    '"2026-03-01T08:00:00"',
    '"2026-03-01T07:59:58.25Z"',
    '"9999-12-31T23:59:59-23:59"',
    '"yesterday"',
    '"2026-02-30T08:00:00Z"',
]
NAMES = [*UNITS, "sensor/T9", "sensor/T1 ", "SENSOR/T1", "", "plates/p/sensor/T1", "v_", "T1"]
NAMES += ["../sensor/T1", "plates/q/sensor/T1", "sensor\\u002fT1", "sensor\\/T1", "s\\u0000", "x"]
BASES = ["", "sensor/", "plates/p/", "plates/p", "plates/q/", "plates/p/sensor/", "zone/Z1/", "s"]
JUNK = [b"\xef\xbb\xbf", b"\x00", b"\xff", b"\xc0\xaf", b"\xed\xa0\x80", b"\\ud800", b'"', b"}"]
JUNK += [b"{", b"[", b",", b":", b" ", b"\n", b"\xe2\x80\xa8", b"1", b"e9", b"-", b".", b"\\"]
SENML_UNITS = ["Cel", "K", "/", "%", "W", "", "cel", "degC"]


class Enemy:
    """An endless source of payloads of one shape: number, json, flat or senml."""

    def __init__(self, seed: int) -> None:
        self._random = random.Random(seed)

    def payload(self, shape: str) -> bytes:
        """Half of them differ from an honest message by their parts, half by their bytes."""
        body: str = getattr(self, f"_{shape}")()
        found = body.encode("utf-8", "surrogatepass")
        for _ in range(self._random.choice((0, 0, 0, 1, 1, 2))):
            found = self._spoil(found)
        return found

    def _any(self, *kinds: list[str]) -> str:
        return self._random.choice(self._random.choice(kinds))

    def _value(self) -> str:
        return self._any(*[GOOD] * 7, NUMBERS)

    def _time(self, *good: str) -> str:
        return self._any([*good], [*good], TIMES)

    def _number(self) -> str:
        pad = self._random.choice(("", "", " ", "\n", "\t\r "))
        return pad + self._any(GOOD, NUMBERS) + pad

    def _member(self, name: str, value: str) -> str:
        return f'"{name}":{self._random.choice(("", " "))}{value}'

    def _object(self, members: list[str]) -> str:
        if self._random.random() < 0.1 and members:
            members.append(self._random.choice(members))  # a name twice
        self._random.shuffle(members)
        return "{" + ",".join(members) + "}"

    def _json(self) -> str:
        inner = self._object([self._member("v", self._value())])
        members = [self._member("data", inner), self._member("ts", self._time(str(NOW // 1000)))]
        if self._random.random() < 0.2:
            members.append(self._member("x:y", '"a:b\\u003a"'))
        return self._object(members)

    def _flat(self) -> str:
        count = self._random.randrange(1, 7)
        members = [self._member(self._any(NAMES), self._value()) for _ in range(count)]
        good = {"at": TIMES[16], "at_ms": str(NOW // 1000), "at_us": str(NOW)}
        for key in self._random.sample([*good], self._random.choice((0, 1, 1, 1, 2))):
            members.append(self._member(key, self._time(good[key])))
        return self._object(members)

    def _senml(self) -> str:
        return "[" + ",".join(self._record() for _ in range(self._random.randrange(1, 5))) + "]"

    def _record(self) -> str:
        chances = {
            "bn": (0.3, lambda: f'"{self._any(BASES, ["", "plates/p/"])}"'),
            "n": (0.95, lambda: f'"{self._any([*UNITS], [*UNITS], NAMES, ["T1", "duty"])}"'),
            "v": (0.95, self._value),
            "bv": (0.1, self._value),
            "bt": (0.3, lambda: self._time(str(NOW // 10**6), "-5")),
            "t": (0.3, lambda: self._time("0", "-5")),
            "u": (0.2, lambda: f'"{self._any(SENML_UNITS)}"'),
            "bu": (0.1, lambda: f'"{self._any(SENML_UNITS)}"'),
            "vs": (0.05, lambda: '"open"'),
            "vb": (0.05, lambda: "true"),
            "scale\\u005f": (0.02, lambda: "10"),
        }
        drawn = self._random.random
        return self._object([self._member(k, f()) for k, (p, f) in chances.items() if drawn() < p])

    def _spoil(self, body: bytes) -> bytes:
        """One byte or a piece cut out, put in, doubled, exchanged or added at an end."""
        pick = self._random.randrange
        i, j = sorted((pick(len(body) + 1), pick(len(body) + 1)))
        junk = self._random.choice(JUNK)
        match pick(6):
            case 0:
                return body[:i] + body[i + 1 :]
            case 1:
                return body[:i] + junk + body[i:]
            case 2:
                return body[:j] + body[i:]
            case 3:
                return body[:i] + bytes([pick(256)]) + body[i + 1 :]
            case 4:
                return body[:j]
            case _:
                return junk + body if pick(2) else body + junk

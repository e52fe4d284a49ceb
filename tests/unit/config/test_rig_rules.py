"""Every rule of a rig file, broken once: the whole message, with its line."""

from __future__ import annotations

from pathlib import Path
from typing import NamedTuple

import pytest

from harness.config.load import rig_from_text
from harness.errors import ConfigurationError

DATA = Path(__file__).parent / "data"
RIG_TEXT = (DATA / "rig.toml").read_text(encoding="utf-8")


class Case(NamedTuple):
    """One edit of the sound file, and the problems that it makes (line, path and words)."""

    name: str
    old: str
    new: str
    problems: tuple[str, ...]
    occurrence: int = 0


def edited(text: str, case: Case) -> str:
    parts = text.split(case.old)
    assert len(parts) > case.occurrence + 1, f"{case.old!r} is not in the sound file"
    place = case.occurrence + 1
    return case.old.join(parts[:place]) + case.new + case.old.join(parts[place:])


CASES = (
    Case(
        "syntax", 'tick = "0.5 s"', "tick = ", ("4: column 8: not valid TOML: Invalid value",)
    ),
    Case(
        "format missing",
        "format = 1\n",
        "\n",
        ("1: format: is missing; write format = 1 as the first line",),
    ),
    Case(
        "format unknown",
        "format = 1",
        "format = 2",
        ("1: format: 2 is not a format known here; it must be 1",),
    ),
    Case(
        "format as text",
        "format = 1",
        'format = "1"',
        ('1: format: "1" is not a format known here; it must be 1',),
    ),
    Case(
        "unknown table",
        "[[source]]",
        "[[sources]]",
        (
            '1: sources: is not a key of the file; did you mean "source"?',
            '46: path[3].from: "PW-HEADER" is not a source of this rig; it has none',
            '55: path[4].from: "PW-HEADER" is not a source of this rig; it has none',
        ),
    ),
    Case(
        "single table as array",
        "[rig]",
        "[[rig]]",
        (
            "1: rig: must be written as a table, [rig]",
            "1: rig.name: is missing",
            "1: rig.tick: is missing",
        ),
    ),
    Case(
        "array as single table",
        "[[source]]",
        "[source]",
        (
            "5: source: must be written as [[source]], once for each",
            '46: path[3].from: "PW-HEADER" is not a source of this rig; it has none',
            '55: path[4].from: "PW-HEADER" is not a source of this rig; it has none',
        ),
    ),
    Case("rig name missing", 'name = "test rig"\n', "", ("2: rig.name: is missing",)),
    Case(
        "rig name empty",
        'name = "test rig"',
        'name = ""',
        ('3: rig.name: "" must not be empty',),
    ),
    Case(
        "tick zero", 'tick = "0.5 s"', 'tick = "0 s"', ('4: rig.tick: "0 s" must be above 0 s',)
    ),
    Case(
        "seed negative",
        'tick = "0.5 s"',
        'tick = "0.5 s"\nseed = -1',
        ("5: rig.seed: -1 must be at least 0",),
    ),
    Case(
        "seed not whole",
        'tick = "0.5 s"',
        'tick = "0.5 s"\nseed = 1.5',
        ("5: rig.seed: 1.5 must be a whole number",),
    ),
    Case(
        "bare number",
        'diameter = "350 mm"',
        "diameter = 0.35",
        (
            '12: vessel[0].diameter: 0.35 is a bare number; write a length with its unit, e.g. "250 mm"',
        ),
    ),
    Case(
        "unit missing",
        'diameter = "350 mm"',
        'diameter = "0.35"',
        (
            '12: vessel[0].diameter: "0.35" has no unit; write a length with its unit, e.g. "250 mm"',
        ),
    ),
    Case(
        "unit unknown",
        'diameter = "350 mm"',
        'diameter = "350 mn"',
        (
            '12: vessel[0].diameter: "350 mn" is not a length: "mn" is not a unit known here; write a length with its unit, e.g. "250 mm"',
        ),
    ),
    Case(
        "unit of another kind",
        'pressure = "3 bar"',
        'pressure = "3 m"',
        (
            '7: source[0].pressure: "3 m" is not a pressure: "m" is of another kind; write a pressure with its unit, e.g. "3 bar"',
        ),
    ),
    Case(
        "no number",
        'pressure = "3 bar"',
        'pressure = "high"',
        (
            '7: source[0].pressure: "high" does not start with a number; write a pressure with its unit, e.g. "3 bar"',
        ),
    ),
    Case(
        "not a quantity",
        'pressure = "3 bar"',
        "pressure = true",
        (
            '7: source[0].pressure: true is not a pressure; write a pressure with its unit, e.g. "3 bar"',
        ),
    ),
    Case(
        "density below zero",
        'density = "998.2 kg/m3"',
        'density = "-1 kg/m3"',
        ('8: source[0].density: "-1 kg/m3" must be above 0 kg/m3',),
    ),
    Case(
        "key misspelt",
        'diameter = "350 mm"',
        'diametre = "350 mm"',
        (
            "9: vessel[0].diameter: is missing",
            '12: vessel[0].diametre: is not a key here; did you mean "diameter"?',
        ),
    ),
    Case(
        "key unlike any",
        'diameter = "350 mm"',
        'diameter = "350 mm"\ncolour = "blue"',
        (
            "13: vessel[0].colour: is not a key here; keys are tag, shape, diameter, height, initial_level",
        ),
    ),
    Case(
        "shape unknown",
        'shape = "vertical_cylinder"',
        'shape = "sphere"',
        ('11: vessel[0].shape: "sphere" must be "vertical_cylinder"',),
    ),
    Case(
        "number in place of text",
        'tag = "TK-101"',
        "tag = 101",
        (
            "10: vessel[0].tag: 101 must be text in quotes",
            '23: path[0].from: "TK-101" is not a vessel of this rig; it has TK-102',
            '37: path[2].from: "TK-101" is not a vessel of this rig; it has TK-102',
            '47: path[3].to: "TK-101" is not a vessel of this rig; it has TK-102',
            '75: transmitter[0].of: "TK-101" is not a vessel of this rig; it has TK-102',
        ),
    ),
    Case(
        "text in place of number",
        "fraction = 0.8",
        'fraction = "0.8"',
        ('42: path[2].fraction: "0.8" must be a plain number',),
    ),
    Case(
        "fraction above one",
        "fraction = 0.8",
        "fraction = 1.2",
        ("42: path[2].fraction: 1.2 must be at most 1.0",),
    ),
    Case(
        "fraction not a number",
        "fraction = 0.8",
        "fraction = nan",
        ("42: path[2].fraction: nan must be a finite number",),
    ),
    Case(
        "discharge coefficient zero",
        "discharge_coefficient = 0.61",
        "discharge_coefficient = 0.0",
        ("25: path[0].discharge_coefficient: 0.0 must be above 0.0",),
    ),
    Case(
        "rangeability one",
        "rangeability = 30",
        "rangeability = 1",
        ("50: path[3].rangeability: 1 must be above 1.0",),
    ),
    Case(
        "kv in another unit",
        'kv = "16 m3/h"',
        'kv = "4.4 l/s"',
        (
            '48: path[3].kv: "4.4 l/s" must be in m3/h at 1 bar, as IEC 60534 defines Kv (Kv = Cv / 1.156); write a Kv with its unit, e.g. "6.3 m3/h"',
        ),
    ),
    Case(
        "kv bare",
        'kv = "16 m3/h"',
        "kv = 16",
        ('48: path[3].kv: 16 is a bare number; write a Kv with its unit, e.g. "6.3 m3/h"',),
    ),
    Case(
        "path kind missing",
        'kind = "orifice"\n',
        "",
        ("20: path[0]: kind is missing; it is one of orifice, overflow, valve",),
    ),
    Case(
        "path kind unknown",
        'kind = "orifice"',
        'kind = "pipe"',
        ('22: path[0].kind: "pipe" is no kind of path; kinds are orifice, overflow, valve',),
    ),
    Case(
        "vessel tag form",
        'tag = "TK-101"',
        'tag = "Tank 1"',
        (
            '10: vessel[0].tag: "Tank 1" is not a tag for a vessel; capitals, a hyphen and a number after ISA-5.1, e.g. "TK-101"',
            '10: vessel[0].tag: "Tank 1" has no path; let one lead into it or out of it',
            '23: path[0].from: "TK-101" is not a vessel of this rig; it has TK-102, Tank 1',
            '37: path[2].from: "TK-101" is not a vessel of this rig; it has TK-102, Tank 1',
            '47: path[3].to: "TK-101" is not a vessel of this rig; it has TK-102, Tank 1',
            '75: transmitter[0].of: "TK-101" is not a vessel of this rig; it has TK-102, Tank 1',
        ),
    ),
    Case(
        "source tag form",
        'tag = "PW-HEADER"',
        'tag = "pw header"',
        (
            '6: source[0].tag: "pw header" is not a tag for a source; capitals, a hyphen and a number after ISA-5.1, e.g. "PW-HEADER"',
            '46: path[3].from: "PW-HEADER" is not a source of this rig; it has pw header',
            '55: path[4].from: "PW-HEADER" is not a source of this rig; it has pw header',
        ),
    ),
    Case(
        "orifice tag form",
        'tag = "RO-101"',
        'tag = "RO101"',
        (
            '21: path[0].tag: "RO101" is not a tag for a path; capitals, a hyphen and a number after ISA-5.1, e.g. "RO-101"',
        ),
    ),
    Case(
        "valve tag form",
        'tag = "FV-102"\nkind',
        'tag = "FC-102"\nkind',
        (
            '53: path[4].tag: "FC-102" is not a tag for a valve; capitals, a hyphen and a number after ISA-5.1, e.g. "FV-101"',
            '53: path[4].tag: "FC-102" has no [[actuator]]; write one with this tag',
            '67: actuator[1].tag: "FV-102" is not a valve of this rig; it has FV-101, FC-102',
            '103: loop[0].load: "FV-102" is not a valve of this rig; it has FV-101, FC-102',
        ),
    ),
    Case(
        "tag drain",
        'tag = "TK-101"',
        'tag = "drain"',
        (
            '10: vessel[0].tag: "drain" is where liquid leaves the rig; name it otherwise',
            '23: path[0].from: "TK-101" is not a vessel of this rig; it has TK-102, drain',
            '37: path[2].from: "TK-101" is not a vessel of this rig; it has TK-102, drain',
            '47: path[3].to: "TK-101" is not a vessel of this rig; it has TK-102, drain',
            '75: transmitter[0].of: "TK-101" is not a vessel of this rig; it has TK-102, drain',
        ),
    ),
    Case(
        "tag twice",
        'tag = "RO-102"',
        'tag = "RO-101"',
        ('28: path[1].tag: "RO-101" is already the tag of path[0]; tags are unique',),
    ),
    Case(
        "outlet of unknown vessel",
        'from = "TK-101"',
        'from = "TK-103"',
        ('23: path[0].from: "TK-103" is not a vessel of this rig; it has TK-102, TK-101',),
    ),
    Case(
        "outlet into unknown vessel",
        'to = "TK-102"',
        'to = "TK-120"',
        ('24: path[0].to: "TK-120" is not a vessel of this rig; it has TK-102, TK-101, drain',),
    ),
    Case(
        "valve from unknown source",
        'from = "PW-HEADER"',
        'from = "PW-HEADR"',
        ('46: path[3].from: "PW-HEADR" is not a source of this rig; it has PW-HEADER',),
    ),
    Case(
        "valve into unknown vessel",
        'to = "TK-101"\nkv',
        'to = "TK-111"\nkv',
        ('47: path[3].to: "TK-111" is not a vessel of this rig; it has TK-101, TK-102',),
    ),
    Case(
        "valve into the drain",
        'to = "TK-101"\nkv',
        'to = "drain"\nkv',
        ('47: path[3].to: "drain" is for outlets; a valve feeds a vessel',),
    ),
    Case(
        "ring of outlets",
        'to = "drain"',
        'to = "TK-101"',
        (
            '31: path[1].to: "TK-101" closes a ring, TK-101 -> TK-102 -> TK-101; liquid only falls',
        ),
    ),
    Case(
        "vessel into itself",
        'to = "drain"',
        'to = "TK-102"',
        ('31: path[1].to: "TK-102" closes a ring, TK-102 -> TK-102; liquid only falls',),
    ),
    Case(
        "vessel without path",
        "[[path]]",
        '[[vessel]]\ntag = "TK-103"\nshape = "vertical_cylinder"\ndiameter = "1 m"\nheight = "1 m"\n[[path]]',
        ('21: vessel[2].tag: "TK-103" has no path; let one lead into it or out of it',),
    ),
    Case(
        "level above rim",
        'initial_level = "0.5 m"',
        'initial_level = "1.7 m"',
        ('14: vessel[0].initial_level: "1.7 m" is above the rim at "1.6 m"',),
    ),
    Case(
        "level below bottom",
        'initial_level = "0.5 m"',
        'initial_level = "-1 mm"',
        ('14: vessel[0].initial_level: "-1 mm" must be at least 0 m',),
    ),
    Case(
        "crest at rim",
        'crest = "1.45 m"',
        'crest = "1600 mm"',
        ('39: path[2].crest: "1600 mm" is not below the rim of TK-101 at "1.6 m"',),
    ),
    Case(
        "actuator of unknown valve",
        '[[actuator]]\ntag = "FV-101"',
        '[[actuator]]\ntag = "FV-103"',
        (
            '44: path[3].tag: "FV-101" has no [[actuator]]; write one with this tag',
            '61: actuator[0].tag: "FV-103" is not a valve of this rig; it has FV-102, FV-101',
        ),
    ),
    Case(
        "actuator twice",
        '[[actuator]]\ntag = "FV-102"',
        '[[actuator]]\ntag = "FV-101"',
        (
            '53: path[4].tag: "FV-102" has no [[actuator]]; write one with this tag',
            '67: actuator[1].tag: "FV-101" has its actuator in actuator[0]; it has one',
        ),
    ),
    Case(
        "fail position unknown",
        'fail_position = "closed"',
        'fail_position = "shut"',
        (
            '64: actuator[0].fail_position: "shut" must be "closed", "open", "hold" or a travel such as "20 %"',
        ),
    ),
    Case(
        "fail position too far",
        'fail_position = "closed"',
        'fail_position = "120 %"',
        (
            '64: actuator[0].fail_position: "120 %" must be "closed", "open", "hold" or a travel such as "20 %"',
        ),
    ),
    Case(
        "output above full",
        'initial_output = "40 %"',
        'initial_output = "140 %"',
        ('71: actuator[1].initial_output: "140 %" must be at most 100 %',),
    ),
    Case(
        "output outside the limits",
        'initial_output = "58 %"',
        'initial_output = "2 %"',
        (
            '65: actuator[0].initial_output: "2 %" is outside the output limits ["5 %", "95 %"] of LIC-102',
        ),
    ),
    Case(
        "both valves show one position",
        'tag = "FV-102"',
        'tag = "LV-101"',
        (
            '53: path[4].tag: "LV-101" has no [[actuator]]; write one with this tag',
            '53: path[4].tag: "LV-101" and "FV-101" would both show their travel as ZT-101',
            '67: actuator[1].tag: "FV-102" is not a valve of this rig; it has FV-101, LV-101',
            '103: loop[0].load: "FV-102" is not a valve of this rig; it has FV-101, LV-101',
        ),
    ),
    Case(
        "level of a path",
        'of = "TK-101"',
        'of = "FV-101"',
        ('75: transmitter[0].of: "FV-101" is not a vessel of this rig; it has TK-101, TK-102',),
    ),
    Case(
        "flow of a vessel",
        'of = "FV-101"',
        'of = "TK-101"',
        (
            '93: transmitter[2].of: "TK-101" is not a path of this rig; it has RO-101, OV-101, FV-101, RO-102, FV-102',
        ),
    ),
    Case(
        "transmitter tag form",
        'tag = "FT-101"',
        'tag = "FI-101"',
        (
            '91: transmitter[2].tag: "FI-101" is not a tag for a transmitter; capitals, a hyphen'
            ' and a number after ISA-5.1, e.g. "LT-101"',
        ),
    ),
    Case(
        "first letter of a level",
        'tag = "LT-101"',
        'tag = "FT-111"',
        (
            '73: transmitter[0].tag: "FT-111" measures level; its first letter is L after ISA-5.1',
        ),
    ),
    Case(
        "measures something else",
        'measures = "level"',
        'measures = "temperature"',
        ('74: transmitter[0].measures: "temperature" must be "level" or "flow"',),
    ),
    Case(
        "range crossed",
        'range = ["0 m", "1.5 m"]',
        'range = ["1.5 m", "0 m"]',
        (
            '76: transmitter[0].range: ["1.5 m", "0 m"] is crossed; the first end lies below the second',
        ),
    ),
    Case(
        "range empty",
        'range = ["0 m", "1.5 m"]',
        'range = ["1 m", "1 m"]',
        (
            '76: transmitter[0].range: ["1 m", "1 m"] is crossed; the first end lies below the second',
        ),
    ),
    Case(
        "range of one end",
        'range = ["0 m", "1.5 m"]',
        'range = ["1.5 m"]',
        ('76: transmitter[0].range: ["1.5 m"] must have 2 or more elements',),
    ),
    Case(
        "range not a list",
        'range = ["0 m", "1.5 m"]',
        'range = "0 to 1.5 m"',
        ('76: transmitter[0].range: "0 to 1.5 m" must be a list in square brackets',),
    ),
    Case(
        "range bare",
        'range = ["0 m", "1.5 m"]',
        'range = [0, "1.5 m"]',
        (
            '76: transmitter[0].range[0]: 0 is a bare number; write a length with its unit, e.g. "250 mm"',
        ),
    ),
    Case(
        "range of flow in length",
        'range = ["0 m3/h", "12 m3/h"]',
        'range = ["0 m3/h", "12 m"]',
        (
            '94: transmitter[2].range[1]: "12 m" is not a volume flow: "m" is of another kind; write a volume flow with its unit, e.g. "6 m3/h"',
        ),
    ),
    Case(
        "noise above a tenth",
        'noise = "0.05 %"',
        'noise = "11 %"',
        ('78: transmitter[0].noise: "11 %" must be at most 10 %',),
    ),
    Case(
        "failure current within the signal",
        'failure_current = "3.6 mA"',
        'failure_current = "3.8 mA"',
        (
            '80: transmitter[0].failure_current: "3.8 mA" is no failure current; at most 3.6 mA or at least 21.0 mA (NAMUR NE 43)',
        ),
    ),
    Case(
        "failure current too high",
        'failure_current = "21 mA"',
        'failure_current = "24 mA"',
        ('89: transmitter[1].failure_current: "24 mA" must be at most 23 mA',),
    ),
    Case(
        "process variable unknown",
        'process_variable = "LT-102"',
        'process_variable = "LT-103"',
        (
            '101: loop[0].process_variable: "LT-103" is not a transmitter of this rig; it has LT-102, LT-101, FT-101',
        ),
    ),
    Case(
        "output unknown",
        'output = "FV-101"',
        'output = "FV-110"',
        ('102: loop[0].output: "FV-110" is not a valve of this rig; it has FV-102, FV-101',),
    ),
    Case(
        "load unknown",
        'load = "FV-102"',
        'load = "RO-102"',
        ('103: loop[0].load: "RO-102" is not a valve of this rig; it has FV-102, FV-101',),
    ),
    Case(
        "load is the output",
        'load = "FV-102"',
        'load = "FV-101"',
        ('103: loop[0].load: "FV-101" is the loop\'s output; the load is another valve',),
    ),
    Case(
        "loop letter",
        'tag = "LIC-102"',
        'tag = "FIC-102"',
        (
            '100: loop[0].tag: "FIC-102" controls LT-102; its first letter is L after ISA-5.1',
            '120: link[0].items[3].point: "LIC-102.MODE" is not a point of this rig; it has FIC-102.MODE, FIC-102.MO, FIC-102.TI, FIC-102.SP, FIC-102.KC, FIC-102.HB, LT-102, LT-101, ...',
            '124: link[0].items[7].point: "LIC-102.MODE" is not a point of this rig; it has FIC-102.MODE, FIC-102.MO, FIC-102.TI, FIC-102.SP, FIC-102.KC, FIC-102.HB, LT-102, LT-101, ...',
        ),
    ),
    Case(
        "loop tag form",
        'tag = "LIC-102"',
        'tag = "LOOP-1"',
        (
            '100: loop[0].tag: "LOOP-1" is not a tag for a loop; capitals, a hyphen and a number after ISA-5.1, e.g. "LIC-101"',
            '120: link[0].items[3].point: "LIC-102.MODE" is not a point of this rig; it has LOOP-1.MODE, LOOP-1.MO, LT-102, LT-101, FT-101, FV-101, ZT-101, FV-102, ...',
            '124: link[0].items[7].point: "LIC-102.MODE" is not a point of this rig; it has LOOP-1.MODE, LOOP-1.MO, LT-102, LT-101, FT-101, FV-101, ZT-101, FV-102, ...',
        ),
    ),
    Case(
        "action unknown",
        'action = "reverse"',
        'action = "inverse"',
        ('104: loop[0].action: "inverse" must be "direct" or "reverse"',),
    ),
    Case(
        "setpoint outside range",
        'initial_setpoint = "750 mm"',
        'initial_setpoint = "1.6 m"',
        (
            '105: loop[0].initial_setpoint: "1.6 m" is outside the range ["0 m", "1.5 m"] of LT-102',
        ),
    ),
    Case(
        "setpoint bare",
        'initial_setpoint = "750 mm"',
        "initial_setpoint = 0.75",
        (
            '105: loop[0].initial_setpoint: 0.75 is a bare number; write a length with its unit, e.g. "250 mm"',
        ),
    ),
    Case(
        "limits crossed",
        'output_limits = ["5 %", "95 %"]',
        'output_limits = ["95 %", "5 %"]',
        (
            '106: loop[0].output_limits: ["95 %", "5 %"] is crossed; the first limit lies below the second',
        ),
    ),
    Case(
        "limit above full",
        'output_limits = ["5 %", "95 %"]',
        'output_limits = ["5 %", "105 %"]',
        ('106: loop[0].output_limits[1]: "105 %" must be at most 100 %',),
    ),
    Case(
        "scan between ticks",
        'scan = "1 s"',
        'scan = "0.7 s"',
        ('107: loop[0].scan: "0.7 s" is not a whole number of ticks of "0.5 s"',),
    ),
    Case(
        "scan shorter than a tick",
        'scan = "1 s"',
        'scan = "0.1 s"',
        ('107: loop[0].scan: "0.1 s" is not a whole number of ticks of "0.5 s"',),
    ),
    Case(
        "scan phase beyond the scan",
        "scan_phase = 1",
        "scan_phase = 2",
        ("108: loop[0].scan_phase: 2 is not below the 2 ticks of a scan",),
    ),
    Case(
        "scan phase below zero",
        "scan_phase = 1",
        "scan_phase = -1",
        ("108: loop[0].scan_phase: -1 must be at least 0",),
    ),
    Case(
        "watchdog shorter than scan",
        'watchdog = "10 s"',
        'watchdog = "0.5 s"',
        ('109: loop[0].watchdog: "0.5 s" is shorter than the scan of "1 s"',),
    ),
    Case(
        "heartbeat shorter than scan",
        'heartbeat_timeout = "5 s"',
        'heartbeat_timeout = "500 ms"',
        ('110: loop[0].heartbeat_timeout: "500 ms" is shorter than the scan of "1 s"',),
    ),
    Case(
        "callable without function",
        'watchdog = "10 s"',
        'watchdog = "10 s"\norders = { mode = "callable" }',
        (
            '110: loop[0].orders: "callable" wants a function that takes the order; write it as a table with function = "module:name"',
        ),
    ),
    Case(
        "function without callable",
        'watchdog = "10 s"',
        'watchdog = "10 s"\norders = { mode = "prompt", function = "bench:take" }',
        ('110: loop[0].orders.function: "bench:take" has no use; no order goes by it',),
    ),
    Case(
        "function no function",
        'watchdog = "10 s"',
        'watchdog = "10 s"\norders = { mode = "callable", function = "bench.py" }',
        ('110: loop[0].orders.function: "bench.py" is no function; write "module:name"',),
    ),
    Case(
        "way unknown",
        'watchdog = "10 s"',
        'watchdog = "10 s"\norders = { mode = "post" }',
        ('110: loop[0].orders.mode: "post" must be "link", "prompt" or "callable"',),
    ),
    Case(
        "setpoint resolution of another kind",
        'watchdog = "10 s"',
        'watchdog = "10 s"\nblock = { setpoint_resolution = "1 s" }',
        (
            '110: loop[0].block.setpoint_resolution: "1 s" is not a length: "s" is of another kind; write a length with its unit, e.g. "250 mm"',
        ),
    ),
    Case(
        "counts without a gain in counts",
        'watchdog = "10 s"',
        'watchdog = "10 s"\nblock = { output_counts = 4095 }',
        ('110: loop[0].block.output_counts: has a meaning only with gain_unit = "counts"',),
    ),
    Case(
        "gain unit unknown",
        'watchdog = "10 s"',
        'watchdog = "10 s"\nblock = { gain_unit = "dB" }',
        (
            '110: loop[0].block.gain_unit: "dB" must be "%/%", "engineering", "proportional band" or "counts"',
        ),
    ),
    Case(
        "orders unknown",
        'watchdog = "10 s"',
        'watchdog = "10 s"\norders = "post"',
        ('110: loop[0].orders: "post" must be "link", "prompt" or "callable"',),
    ),
    Case(
        "two loops, one output",
        "[[link]]",
        '[[loop]]\ntag = "LIC-101"\nprocess_variable = "LT-101"\noutput = "FV-101"\nload = "FV-102"\naction = "reverse"\noutput_limits = ["0 %", "100 %"]\nscan = "1 s"\nwatchdog = "5 s"\n[[link]]',
        ('114: loop[1].output: "FV-101" is the output of LIC-102; a valve has one master',),
    ),
    Case(
        "load is the output of another loop",
        "[[link]]",
        '[[loop]]\ntag = "LIC-101"\nprocess_variable = "LT-101"\noutput = "FV-102"\nload = "FV-101"\naction = "reverse"\noutput_limits = ["0 %", "100 %"]\nscan = "1 s"\nwatchdog = "5 s"\n[[link]]',
        (
            '103: loop[0].load: "FV-102" is the output of LIC-101',
            '115: loop[1].load: "FV-101" is the output of LIC-102',
        ),
    ),
    Case(
        "link kind unknown",
        'kind = "opcua_server"',
        'kind = "opcua"',
        (
            '128: link[1].kind: "opcua" is no kind of link; kinds are modbus_server, opcua_server',
        ),
    ),
    Case(
        "link name twice",
        'name = "opcua"',
        'name = "modbus"',
        ('127: link[1].name: "modbus" is already the name of link[0]',),
    ),
    Case(
        "host by name",
        "port = 5020",
        'host = "skid.example"\nport = 5020',
        (
            '114: link[0].host: "skid.example" is not an address to listen on, e.g. "127.0.0.1" for this machine alone or "0.0.0.0" for every network it is on',
        ),
    ),
    Case("port zero", "port = 5020", "port = 0", ("114: link[0].port: 0 must be at least 1",)),
    Case("unit zero", "unit = 1", "unit = 0", ("115: link[0].unit: 0 must be at least 1",)),
    Case(
        "one port for two links",
        'points = ["LT-102", "FV-101"]',
        "port = 5020",
        ("129: link[1].port: 5020 at 127.0.0.1 is taken by link[0]",),
    ),
    Case(
        "one port for two links, one everywhere",
        'points = ["LT-102", "FV-101"]',
        'host = "0.0.0.0"\nport = 5020',
        ("130: link[1].port: 5020 at 0.0.0.0 is taken by link[0]",),
    ),
    Case(
        "one port for two links, by name",
        'points = ["LT-102", "FV-101"]',
        'host = "localhost"\nport = 5020',
        ("130: link[1].port: 5020 at localhost is taken by link[0]",),
    ),
    Case(
        "shown point unknown",
        'points = ["LT-102", "FV-101"]',
        'points = ["LT-102", "FV-103"]',
        (
            '129: link[1].points[1]: "FV-103" is not a point of this rig; it has FV-102, FV-101, FT-101, ZT-102, ZT-101, LT-102, LT-101, LIC-102.SP, ...',
        ),
    ),
    Case(
        "item point unknown",
        'point = "LT-102", address = 0',
        'point = "LT-103", address = 0',
        (
            '117: link[0].items[0].point: "LT-103" is not a point of this rig; it has LT-102, LT-101, ZT-102, ZT-101, FT-101, LIC-102.TI, LIC-102.SP, LIC-102.MO, ...',
        ),
    ),
    Case(
        "item not a table",
        '    { point = "TICK", address = 4, encoding = "uint32" },',
        '    "TICK",',
        ('119: link[0].items[2]: "TICK" must be a table in braces, { key = value }',),
    ),
    Case(
        "item address beyond the end",
        '"TICK", address = 4',
        '"TICK", address = 65536',
        ("119: link[0].items[2].address: 65536 must be at most 65535",),
    ),
    Case(
        "second register beyond the end",
        '"TICK", address = 4',
        '"TICK", address = 65535',
        (
            "119: link[0].items[2].address: 65535 leaves no room for the second register of a uint32; the last address is 65535",
        ),
    ),
    Case(
        "addresses overlap",
        '"TICK", address = 4',
        '"TICK", address = 3',
        ("119: link[0].items[2].address: 3 is taken by FV-101 at 2",),
    ),
    Case(
        "item encoding unknown",
        'encoding = "uint32"',
        'encoding = "uint64"',
        (
            '119: link[0].items[2].encoding: "uint64" must be "uint16", "int16", "uint32", "int32", "float32" or "bit"',
        ),
    ),
    Case(
        "word order unknown",
        'word_order = "CDAB"',
        'word_order = "CBAD"',
        ('117: link[0].items[0].word_order: "CBAD" must be "ABCD", "CDAB", "BADC" or "DCBA"',),
    ),
    Case(
        "word order of one register",
        'address = 6, encoding = "uint16"',
        'address = 6, encoding = "uint16", word_order = "CDAB"',
        ("120: link[0].items[3].word_order: has no meaning for uint16, which is one register",),
    ),
    Case(
        "split of one register",
        'address = 6, encoding = "uint16"',
        'address = 6, encoding = "uint16", split_writes = true',
        (
            "120: link[0].items[3].split_writes: has no meaning for uint16, which is one register",
        ),
    ),
    Case(
        "split not a switch",
        "split_writes = true",
        "split_writes = 1",
        ("118: link[0].items[1].split_writes: 1 must be true or false",),
    ),
    Case(
        "counts without counts",
        'address = 6, encoding = "uint16"',
        'address = 6, encoding = "uint16", counts = [0, 1]',
        ('120: link[0].items[3].counts: has a meaning only with scaling = "counts"',),
    ),
    Case(
        "counts crossed",
        "counts = [0, 32000]",
        "counts = [32000, 0]",
        (
            "122: link[0].items[5].counts: [32000, 0] is crossed; the first end lies below the second",
        ),
    ),
    Case(
        "counts beyond the type",
        "counts = [0, 32000]",
        "counts = [0, 40000]",
        ("122: link[0].items[5].counts: [0, 40000] does not fit int16, -32768 to 32767",),
    ),
    Case(
        "default counts beyond the type",
        ", counts = [0, 32000]",
        "",
        ("122: link[0].items[5].encoding: [0, 65535] does not fit int16, -32768 to 32767",),
    ),
    Case(
        "counts as float",
        'address = 8, encoding = "int16", scaling = "counts", counts = [0, 32000]',
        'address = 10, encoding = "float32", scaling = "counts"',
        ('122: link[0].items[5].scaling: "counts" are integers; the encoding is float32',),
    ),
    Case(
        "current of no transmitter",
        'point = "LT-102", address = 7',
        'point = "FV-101", address = 7',
        ('121: link[0].items[4].scaling: "current": FV-101 is no transmitter\'s signal',),
    ),
    Case(
        "factor of a float",
        'word_order = "CDAB"',
        "factor = 10.0",
        (
            '117: link[0].items[0].factor: has a meaning only for integers with scaling = "engineering"',
        ),
    ),
    Case(
        "value beyond the type",
        "factor = 1000.0",
        "factor = 100000.0",
        (
            "123: link[0].items[6].factor: LT-102 goes from 0 to 150000 in the register; uint16 holds 0 to 65535",
        ),
    ),
    Case(
        "tick in one register",
        'point = "LT-102", address = 9, encoding = "uint16", factor = 1000.0',
        'point = "TICK", address = 9, encoding = "uint16"',
        (
            "123: link[0].items[6].encoding: TICK goes from 0 to 4.29497e+09 in the register; uint16 holds 0 to 65535",
        ),
    ),
    Case(
        "bit of a level",
        'point = "LIC-102.MODE", address = 0',
        'point = "LT-102", address = 0',
        ('124: link[0].items[7].encoding: "bit" cannot hold LT-102; only a mode is a bit',),
    ),
    Case(
        "bit with a scaling",
        'encoding = "bit"',
        'encoding = "bit", scaling = "counts"',
        ('124: link[0].items[7].scaling: "counts" has no meaning for a bit',),
    ),
    Case(
        "sources not an array",
        '[[source]]\ntag = "PW-HEADER"\npressure = "3 bar"\ndensity = "998.2 kg/m3"\n',
        'source = ["PW-HEADER"]\n[nothing]\n',
        (
            "5: rig.source: is not a key here; keys are name, description, tick, seed, gravity",
            "6: nothing: is not a key of the file; keys are format, rig, source, vessel, path, transmitter, actuator, loop, link",
            '44: path[3].from: "PW-HEADER" is not a source of this rig; it has none',
            '53: path[4].from: "PW-HEADER" is not a source of this rig; it has none',
        ),
    ),
    Case(
        "no vessels",
        '[[vessel]]\ntag = "TK-101"\nshape = "vertical_cylinder"\ndiameter = "350 mm"\nheight = "1.6 m"\ninitial_level = "0.5 m"\n[[vessel]]\ntag = "TK-102"\nshape = "vertical_cylinder"\ndiameter = "550 mm"\nheight = "1.6 m"\n[[path]]\ntag = "RO-101"\nkind = "orifice"\nfrom = "TK-101"\nto = "TK-102"\ndischarge_coefficient = 0.61\ndiameter = "29.7 mm"\n[[path]]\ntag = "RO-102"\nkind = "orifice"\nfrom = "TK-102"\nto = "drain"\ndischarge_coefficient = 0.61\ndiameter = "40.5 mm"\n[[path]]\ntag = "OV-101"\nkind = "overflow"\nfrom = "TK-101"\nto = "TK-102"\ncrest = "1.45 m"\nwidth = "300 mm"\ndischarge_coefficient = 0.6\nfraction = 0.8\n[[path]]\ntag = "FV-101"\nkind = "valve"\nfrom = "PW-HEADER"\nto = "TK-101"\nkv = "16 m3/h"\ncharacteristic = "equal_percentage"\nrangeability = 30\nline_kv = "7.4 m3/h"\n[[path]]\ntag = "FV-102"\nkind = "valve"\nfrom = "PW-HEADER"\nto = "TK-102"\nkv = "6.3 m3/h"\ncharacteristic = "linear"\nrangeability = 50\n[[actuator]]\ntag = "FV-101"\nstroke_time = "6 s"\nlag = "1 s"\nfail_position = "closed"\ninitial_output = "58 %"\n[[actuator]]\ntag = "FV-102"\nstroke_time = "6 s"\nlag = "1 s"\nfail_position = "hold"\ninitial_output = "40 %"\n[[transmitter]]\ntag = "LT-101"\nmeasures = "level"\nof = "TK-101"\nrange = ["0 m", "1.5 m"]\ndamping = "1 s"\nnoise = "0.05 %"\nresolution = "0.01 %"\nfailure_current = "3.6 mA"\n[[transmitter]]\ntag = "LT-102"\nmeasures = "level"\nof = "TK-102"\nrange = ["0 m", "1.5 m"]\ndamping = "1 s"\nnoise = "0.05 %"\nresolution = "0.01 %"\nfailure_current = "21 mA"\n[[transmitter]]\ntag = "FT-101"\nmeasures = "flow"\nof = "FV-101"\nrange = ["0 m3/h", "12 m3/h"]\ndamping = "2 s"\nnoise = "0.2 %"\nresolution = "0.02 %"\nfailure_current = "3.6 mA"\n[[loop]]\ntag = "LIC-102"\nprocess_variable = "LT-102"\noutput = "FV-101"\nload = "FV-102"\naction = "reverse"\ninitial_setpoint = "750 mm"\noutput_limits = ["5 %", "95 %"]\nscan = "1 s"\nscan_phase = 1\nwatchdog = "10 s"\nheartbeat_timeout = "5 s"\n',
        "",
        (
            "1: vessel: is missing; a rig has at least one [[vessel]]",
            '15: link[0].items[0].point: "LT-102" is not a point of this rig; it has TICK',
            '16: link[0].items[1].point: "FV-101" is not a point of this rig; it has TICK',
            '18: link[0].items[3].point: "LIC-102.MODE" is not a point of this rig; it has TICK',
            '19: link[0].items[4].point: "LT-102" is not a point of this rig; it has TICK',
            '20: link[0].items[5].point: "LT-102" is not a point of this rig; it has TICK',
            '21: link[0].items[6].point: "LT-102" is not a point of this rig; it has TICK',
            '22: link[0].items[7].point: "LIC-102.MODE" is not a point of this rig; it has TICK',
            '27: link[1].points[0]: "LT-102" is not a point of this rig; it has TICK',
            '27: link[1].points[1]: "FV-101" is not a point of this rig; it has TICK',
        ),
    ),
    Case(
        "many at once",
        'tick = "0.5 s"\n[[source]]\ntag = "PW-HEADER"\npressure = "3 bar"\ndensity = "998.2 kg/m3"\n[[vessel]]\ntag = "TK-101"\nshape = "vertical_cylinder"\ndiameter = "350 mm"\nheight = "1.6 m"\n',
        'tick = 0.5\nsed = 3\n[[source]]\ntag = "PW-HEADER"\npressure = "3 mar"\ndensity = "998.2 kg/m3"\n[[vessel]]\ntag = "TK-101"\nshape = "vertical_cylinder"\ndiameter = 350\nheight = "0.4 m"\n',
        (
            '4: rig.tick: 0.5 is a bare number; write a time with its unit, e.g. "90 s"',
            '5: rig.sed: is not a key here; did you mean "seed"?',
            '8: source[0].pressure: "3 mar" is not a pressure: "mar" is not a unit known here; write a pressure with its unit, e.g. "3 bar"',
            '13: vessel[0].diameter: 350 is a bare number; write a length with its unit, e.g. "250 mm"',
            '15: vessel[0].initial_level: "0.5 m" is above the rim at "0.4 m"',
            '40: path[2].crest: "1.45 m" is not below the rim of TK-101 at "0.4 m"',
        ),
    ),
)


@pytest.mark.parametrize("case", CASES, ids=lambda case: case.name)
def test_broken_rule_is_reported_with_line_value_and_rule(case):
    with pytest.raises(ConfigurationError) as caught:
        rig_from_text(edited(RIG_TEXT, case), "rig.toml")
    assert caught.value.problems == tuple(f"rig.toml:{problem}" for problem in case.problems)


def test_case_names_are_unique():
    names = [case.name for case in CASES]
    assert len(set(names)) == len(names)

"""Every refusal of the case file, rendered once and compared in full.

Lists that come from the drug file or the format itself are written <forms>, <questions> and so on.
"""

from __future__ import annotations

from typing import Any

import pytest

from pkcalc import case as case_module
from pkcalc.case import CaseFile, read_case_text
from pkcalc.drugs.profile import load_profile
from pkcalc.errors import CaseError, DrugFileError
from tests.unit.cases import plain


def full(messages: list[str]) -> list[str]:
    profile = load_profile("phenytoin")
    lists = {
        "<forms>": profile.forms,
        "<populations>": profile.populations,
        "<shelves>": profile.shelves,
        "<questions>": profile.questions,
        "<keys>": sorted(CaseFile.model_fields),
    }
    for mark, words in lists.items():
        messages = [m.replace(mark, ", ".join(words)) for m in messages]
    return messages


#: What is changed in a plain case, and what is said.
CHANGES: list[tuple[dict[str, Any], list[str]]] = [
    ({"pkcalc_case": 0}, ["Pkcalc case (line 1): format version 0. Allowed: 1. Correct the version."]),
    (
        {"drug": "aspirin"},
        [
            'Drug (line 1): "aspirin" was given. Allowed: ethanol, phenytoin, salicylate, theophylline, voriconazole. Choose one of these.'
        ],
    ),
    (
        {"now": "2026-11-31 10:00"},
        [
            'Time of the consult (line 1): "2026-11-31 10:00" was given. Allowed: a date such as 2026-03-04 06:10 or 4 Mar 2026 06:10. There is no such date or time: check it against the chart.'
        ],
    ),
    (
        {"patient": {"age": "130 years"}},
        ["Age (line 1): 130 years was given. Allowed: 0 to 120 years (both ends count). Check the age and its unit."],
    ),
    (
        {"patient": {"weight": "700 kg"}},
        ["Weight (line 1): 700 kg was given. Allowed: 0.4 to 400 kg (both ends count). Check the weight and its unit."],
    ),
    (
        {"patient": {"age": "40 years", "weight": "7 kg"}},
        [
            "Weight (line 1): 7 kg at 40 years. Allowed: 25 kg or more from 17 years. Check the weight, its unit and the age."
        ],
    ),
    (
        {"patient": {"age": "4 years", "weight": "70 kg"}},
        ["Weight (line 1): 70 kg at 4 years. Allowed: 60 kg or less under 6 years. Check weight and age."],
    ),
    (
        {"patient": {"height": "2 cm"}},
        ["Height (line 1): 2 cm was given. Allowed: 25 to 250 cm (both ends count). Check the height and its unit."],
    ),
    (
        {"albumin": {"value": "29 g/dL"}},
        [
            "Albumin (line 1): 29 g/dL was given. Allowed: 1 to 6 g/dL (both ends count). Did you mean 29 g/L? Check the unit."
        ],
    ),
    (
        {"albumin": {"value": "2.9 g/L"}},
        [
            "Albumin (line 1): 2.9 g/L was given. Allowed: 10 to 60 g/L (both ends count). Did you mean 2.9 g/dL? Check the unit."
        ],
    ),
    (
        {"albumin": {"value": "95 g/L"}},
        [
            "Albumin (line 1): 95 g/L was given. Allowed: 10 to 60 g/L (1 to 6 g/dL; both ends count). Check the number and its unit against the laboratory report."
        ],
    ),
    (
        {"albumin": {"value": "40 g/L", "taken": "2026-12-02 07:00"}},
        [
            "Albumin, taken (line 1): it was taken at 2 Dec 2026 07:00, after the consult (1 Dec 2026 10:00). Allowed: a time before the consult. Check the dates."
        ],
    ),
    (
        {"context": {"valproat": "yes"}},
        ['Context, valproat (line 1): this question is not known. Allowed: <questions>. Did you mean "valproate"?'],
    ),
    (
        {"context": {"zzz": "yes"}},
        ["Context, zzz (line 1): this question is not known. Allowed: <questions>. Remove it."],
    ),
    (
        {"context": {"valproate": {"answer": "yes", "since": "4/5/26"}}},
        [
            'Context, valproate, since (line 1): "4/5/26" was given. Allowed: a date such as 2026-03-04 06:10 or 4 Mar 2026 06:10. Day and month in figures can be swapped: write the month in words.'
        ],
    ),
    (
        {"patient": {"sex": "male"}, "context": {"pregnancy": "yes", "delivery": "yes"}},
        [
            "Context, pregnancy (line 1): yes was answered for a male patient. Allowed: no, or sex female. Correct one of them.",
            "Context, delivery (line 1): yes was answered for a male patient. Allowed: no, or sex female. Correct one of them.",
        ],
    ),
    (
        {"context": {"tube_feed": "unknown", "tube_feed_change": "yes"}},
        [
            "Context, tube feed (line 1): unknown was answered although a change of tube feeds was stated. Allowed: yes or no. Say whether the patient is tube fed now."
        ],
    ),
    (
        {"target": {"low": "20 mg/L", "high": "10 mg/L"}},
        [
            "Target (line 1): 20 mg/L to 10 mg/L was given. Allowed: a low end below the high end. Swap or correct the two."
        ],
    ),
    (
        {"target": {"low": "0.1 mg/L", "high": "200 mg/L"}},
        [
            "Target, low (line 1): 0.1 mg/L was given. Allowed: 0.5 to 100 mg/L (both ends count). Check the number and its unit.",
            "Target, high (line 1): 200 mg/L was given. Allowed: 0.5 to 100 mg/L (both ends count). Check the number and its unit.",
        ],
    ),
    (
        {"target": {"low": "10 mg/L", "high": "20 mg/L"}, "aim": "25 mg/L"},
        [
            "Aim (line 1): 25 mg/L lies outside the target range 10 to 20 mg/L. Allowed: 10 to 20 mg/L. Change the aim or the target range."
        ],
    ),
    (
        {"aim": "300 mg/L"},
        [
            "Aim (line 1): 300 mg/L was given. Allowed: 0.5 to 100 mg/L (both ends count). Check the number and its unit."
        ],
    ),
    (
        {"population": "martian"},
        ['Population (line 1): "martian" was given. Allowed: <populations>. Choose one of the named populations.'],
    ),
    (
        {"plan": {"shelf": "moon"}},
        ['Plan, shelf (line 1): "moon" was given. Allowed: <shelves>. Choose one of these shelves.'],
    ),
    (
        {"plan": {"largest_step": "9 g/day"}},
        [
            "Plan, largest step (line 1): 9 g/day was given. Allowed: 1 to 3,000 mg/day (both ends count). Check number and unit."
        ],
    ),
    (
        {"plan": {"load": {"form": "gum"}}},
        ['Plan, load, form (line 1): "gum" was given. Allowed: <forms>. Choose a form.'],
    ),
    (
        {"levels": [{"value": "800 mg/L", "kind": "total", "drawn": "2026-09-15 07:00"}]},
        [
            "Level 1 (line 1): 800 mg/L was given. Allowed: 0.5 to 100 mg/L for a total level (both ends count). Check the number, its unit and its kind against the laboratory report."
        ],
    ),
    (
        {"levels": [{"value": "<", "kind": "total", "drawn": "2026-09-15 07:00"}]},
        [
            "Level 1 (line 1): nothing was given. Allowed: a number with mg/L or mcg/mL or umol/L. Enter number and unit."
        ],
    ),
    (
        {"levels": [{"value": "8 mg/L", "kind": "normalised", "drawn": "2026-09-15 07:00"}]},
        [
            'Level 1, normalised by (line 1): a normalised level was given without saying who normalised it. Allowed: for example "laboratory". Say who normalised it, or give the measured total and the albumin.'
        ],
    ),
    (
        {"levels": [{"value": "8 mg/L", "kind": "total", "drawn": "2026-09-15 07:00", "on_dose": 3}]},
        ["Level 1, on dose (line 1): line 3 was named. Allowed: 1 to 2. Name a line of the record."],
    ),
    (
        {"doses": [], "levels": [{"value": "8 mg/L", "kind": "total", "drawn": "2026-09-15 07:00", "on_dose": 1}]},
        [
            "Level 1, on dose (line 1): line 1 was named. Allowed: none: there is no dose line. Name a line of the record."
        ],
    ),
    (
        {
            "levels": [
                {
                    "value": "8 mg/L",
                    "kind": "total",
                    "drawn": "2026-09-15 07:00",
                    "other_levels": {"valproate": "900 mg/L"},
                }
            ]
        },
        [
            "Level 1, other levels, valproate (line 1): 900 mg/L was given. Allowed: 1 to 300 mg/L (both ends count). Check the number and its unit."
        ],
    ),
    (
        {"levels": [{"value": "8 mg/L", "kind": "total", "drawn": "2026-12-02 07:00"}]},
        [
            "Level 1, drawn (line 1): it was drawn at 2 Dec 2026 07:00, after the consult (1 Dec 2026 10:00). Allowed: a time before the consult. Check the dates."
        ],
    ),
    (
        {
            "levels": [
                {
                    "value": "8 mg/L",
                    "kind": "total",
                    "drawn": "2026-09-15 07:00",
                    "albumin": {"value": "40 g/L", "taken": "2026-12-02 07:00"},
                }
            ]
        },
        [
            "Level 1, albumin, taken (line 1): it was taken at 2 Dec 2026 07:00, after the consult (1 Dec 2026 10:00). Allowed: a time before the consult. Check the dates."
        ],
    ),
    (
        {"doses": [{"amount": "300 mg", "every": "24 h", "from": "2026-08-20 21:00"}]},
        [
            "Dose line 1, form (line 1): no product form was given. Allowed: <forms>. Name the form: the salts differ, and there is no default."
        ],
    ),
    (
        {"doses": [{"form": "extended-capsul", "amount": "300 mg", "every": "24 h", "from": "2026-08-20 21:00"}]},
        ['Dose line 1, form (line 1): "extended-capsul" was given. Allowed: <forms>. Did you mean "extended-capsule"?'],
    ),
    (
        {"doses": [{"form": "bar", "amount": "300 mg", "every": "24 h", "from": "2026-08-20 21:00"}]},
        ['Dose line 1, form (line 1): "bar" was given. Allowed: <forms>. Choose one of these.'],
    ),
    (
        {"doses": [{"form": "sodium", "amount": "4 g", "every": "24 h", "from": "2026-08-20 21:00"}]},
        [
            "Dose line 1, amount (line 1): 4 g was given. Allowed: above 0 and up to 3,000 mg in one dose of phenytoin sodium. Check the number, its unit and the form."
        ],
    ),
    (
        {
            "doses": [
                {"form": "fosphenytoin-injection", "amount": "500 mg", "every": "24 h", "from": "2026-08-20 21:00"}
            ]
        },
        ['Dose line 1, amount (line 1): the unit "mg" was given. Allowed: mg PE. Give one of these units.'],
    ),
    (
        {"doses": [{"form": "extended-capsule", "amount": "300 mg", "every": "200 h", "from": "2026-08-20 21:00"}]},
        ["Dose line 1, every (line 1): 200 h was given. Allowed: 1 to 168 h (both ends count). Check the interval."],
    ),
    (
        {"doses": [{"form": "extended-capsule", "every": "24 h", "from": "2026-08-20 21:00"}]},
        ["Dose line 1, amount (line 1): nothing was given. Allowed: a number with mg or g. Enter number and unit."],
    ),
    (
        {"doses": [{"form": "extended-capsule", "amount": "300 mg", "from": "2026-08-20 21:00"}]},
        [
            "Dose line 1 (line 1): it is not clear what kind of line this is. Allowed: amount with every, or daily, or at, or rate. Give exactly one of them."
        ],
    ),
    (
        {
            "doses": [
                {
                    "form": "extended-capsule",
                    "amount": "300 mg",
                    "every": "24 h",
                    "from": "2026-08-20 21:00",
                    "at": "2026-08-20 21:00",
                }
            ]
        },
        [
            "Dose line 1 (line 1): at and every or daily were both given. Allowed: amount with every, or daily, or at, or rate. Give exactly one of them."
        ],
    ),
    (
        {
            "doses": [
                {
                    "form": "extended-capsule",
                    "amount": "300 mg",
                    "every": "24 h",
                    "from": "2026-08-20 21:00",
                    "daily": [{"time": "21:00", "amount": "300 mg"}],
                }
            ]
        },
        [
            "Dose line 1 (line 1): doses by time of day and an amount with an interval were both given. Allowed: one of the two. Remove amount and every, or daily."
        ],
    ),
    (
        {
            "doses": [
                {
                    "form": "extended-capsule",
                    "from": "2026-08-20 21:00",
                    "daily": [{"time": "21:00", "amount": "300 mg"}, {"time": "21:00", "amount": "100 mg"}],
                }
            ]
        },
        [
            "Dose line 1 (line 1): the same form stands twice at the same time. Allowed: each time once. Add the two amounts up."
        ],
    ),
    (
        {
            "doses": [
                {
                    "form": "extended-capsule",
                    "from": "2026-08-20 21:00",
                    "daily": [{"time": "9 pm", "amount": "300 mg"}],
                }
            ]
        },
        [
            'Dose line 1, dose 1, time (line 1): "9 pm" was given. Allowed: a time of day such as 21:00. Use the 24 h clock, 00:00 to 23:59.'
        ],
    ),
    (
        {
            "doses": [
                {
                    "form": "extended-capsule",
                    "amount": "300 mg",
                    "every": "24 h",
                    "from": "2026-08-20 21:00",
                    "over": "30 min",
                }
            ]
        },
        [
            "Dose line 1, over (line 1): 30 min was given for extended capsules (phenytoin sodium). Allowed: no infusion time. Remove it."
        ],
    ),
    (
        {
            "doses": [
                {"form": "injection", "amount": "300 mg", "every": "24 h", "from": "2026-08-20 21:00", "over": "48 h"}
            ]
        },
        [
            "Dose line 1, over (line 1): 48 h was given. Allowed: 1 min to 24 h (both ends count). Check the infusion time."
        ],
    ),
    (
        {
            "doses": [
                {
                    "form": "extended-capsule",
                    "amount": "300 mg",
                    "every": "24 h",
                    "from": "2026-08-20 21:00",
                    "until": "2026-08-20 20:00",
                }
            ]
        },
        [
            "Dose line 1 (line 1): it ends (20 Aug 2026 20:00) before or when it starts (20 Aug 2026 21:00). Allowed: an end after the start. Check both times."
        ],
    ),
    (
        {
            "doses": [
                {
                    "form": "extended-capsule",
                    "amount": "300 mg",
                    "every": "24 h",
                    "from": "2026-08-20 21:00",
                    "for_about": "3 months",
                }
            ]
        },
        ["Dose line 1 (line 1): from and for about were both given. Allowed: one of the two. Remove one of them."],
    ),
    (
        {
            "doses": [
                {
                    "form": "extended-capsule",
                    "amount": "300 mg",
                    "every": "24 h",
                    "for_about": "3 months",
                    "missed": ["2026-09-01 21:00"],
                }
            ]
        },
        [
            "Dose line 1 (line 1): missed doses were listed for a line without a start. Allowed: missed with from. Give from instead of for about."
        ],
    ),
    (
        {"doses": [{"form": "extended-capsule", "amount": "300 mg", "every": "24 h", "for_about": "200 years"}]},
        ["Dose line 1, for about (line 1): 200 years was given. Allowed: up to 100 years. Check the length."],
    ),
    (
        {
            "doses": [
                {
                    "form": "extended-capsule",
                    "amount": "300 mg",
                    "every": "24 h",
                    "from": "2026-08-20 21:00",
                    "missed": ["2026-08-01 21:00"],
                }
            ]
        },
        [
            "Dose line 1, missed dose 1 (line 1): 1 Aug 2026 21:00 lies outside the line's own time. Allowed: a time within the line. Check the date."
        ],
    ),
    (
        {
            "doses": [
                {
                    "form": "extended-capsule",
                    "amount": "300 mg",
                    "every": "24 h",
                    "from": "2026-08-20 21:00",
                    "missed": ["2026-09-01 20:00"],
                }
            ]
        },
        [
            "Dose line 1, missed dose 1 (line 1): no dose was due at 1 Sep 2026 20:00. Allowed: the clock time of a dose of this line. Give the time the dose was due."
        ],
    ),
    (
        {"doses": [{"form": "extended-capsule", "amount": "300 mg", "every": "24 h", "from": "2026-12-02 21:00"}]},
        [
            "Dose line 1, from (line 1): it starts at 2 Dec 2026 21:00, after the consult (1 Dec 2026 10:00). Allowed: a time before the consult. The record holds what was given; put what is planned under proposed."
        ],
    ),
    (
        {"doses": [{"form": "extended-capsule", "amount": "300 mg", "every": "1 h", "from": "1990-01-01 00:00"}]},
        [
            "Doses (line 1): the lines make about 323,602 doses. Allowed: at most 100,000 doses. Begin the record later, or say for about how long the first dose was taken."
        ],
    ),
    (
        {"doses": [{"form": "injection", "amount": "300 mg", "at": "2026-08-20 21:00", "until": "2026-08-21 21:00"}]},
        [
            "Dose line 1 (line 1): from, until, for about or missed was given for a single dose. Allowed: at alone. Remove them, or give every instead of at."
        ],
    ),
    (
        {"doses": [{"form": "injection", "amount": "300 mg", "at": "2026-12-02 21:00"}]},
        [
            "Dose line 1, at (line 1): it starts at 2 Dec 2026 21:00, after the consult (1 Dec 2026 10:00). Allowed: a time before the consult. The record holds what was given; put what is planned under proposed."
        ],
    ),
    (
        {"doses": [{"form": "injection", "from": "2026-08-20 21:00", "rate": "50 mg/min"}]},
        [
            "Dose line 1 (line 1): an infusion was given without both ends. Allowed: from and until. Add both clock times."
        ],
    ),
    (
        {
            "doses": [
                {
                    "form": "injection",
                    "amount": "300 mg",
                    "from": "2026-08-20 21:00",
                    "rate": "50 mg/min",
                    "until": "2026-08-20 21:20",
                }
            ]
        },
        [
            "Dose line 1 (line 1): amount, over, for about or missed was given for a continuous infusion. Allowed: rate with from and until. Remove them."
        ],
    ),
    (
        {
            "doses": [
                {
                    "form": "extended-capsule",
                    "from": "2026-08-20 21:00",
                    "rate": "50 mg/min",
                    "until": "2026-08-20 21:20",
                }
            ]
        },
        [
            "Dose line 1, rate (line 1): 50 mg/min was given for extended capsules (phenytoin sodium). Allowed: a form for a vein. Check the form."
        ],
    ),
    (
        {"doses": [{"form": "injection", "from": "2026-08-20 21:00", "rate": "50 g/h", "until": "2026-08-20 21:20"}]},
        [
            "Dose line 1, rate (line 1): 50 g/h was given. Allowed: up to 3,000 mg in an hour of injection into a vein (phenytoin sodium). Check the number and its unit."
        ],
    ),
    (
        {
            "doses": [
                {
                    "form": "fosphenytoin-injection",
                    "from": "2026-08-20 21:00",
                    "rate": "50 mg/min",
                    "until": "2026-08-20 21:20",
                }
            ]
        },
        [
            'Dose line 1, rate (line 1): the unit "mg/min" was given. Allowed: mg PE/day or mg PE/min. Give one of these units.'
        ],
    ),
    (
        {"now": "2026-12-01 10:00Z"},
        [
            "Times: some clock times carry a time zone offset and some do not. Allowed: all with an offset or all without. Add the offset to all, or remove it from all."
        ],
    ),
    (
        {"proposed": [{"form": "extended-capsule", "amount": "300 mg", "every": "0.5 h"}]},
        [
            "Proposed regimen 1, every (line 1): 0.5 h was given. Allowed: 1 to 168 h (both ends count). Check the interval."
        ],
    ),
    (
        {"chosen": {"regimen": {"amount": "300 mg", "every": "24 h"}}},
        [
            "Chosen regimen, form (line 1): no product form was given. Allowed: <forms>. Name the form: the salts differ, and there is no default."
        ],
    ),
    (
        {
            "forecast_then": [
                {"drawn": "2026-11-01 07:00", "kind": "total", "median": "8 mg/L", "low": "9 mg/L", "high": "12 mg/L"}
            ]
        },
        [
            "Earlier forecast 1 (line 1): low, median and high are not in order. Allowed: low to high. Check the three numbers."
        ],
    ),
]

#: Texts that are no case file, and what is said.
TEXTS: list[tuple[str, list[str]]] = [
    (
        "",
        [
            "Case file, line 1: the text is not valid JSON at column 1. Allowed: a JSON document. Check commas, quotes and brackets there."
        ],
    ),
    ("[]", ["Case file: the text is not a case. Allowed: a JSON object in { }. Compare it with pkcalc schema."]),
    (
        '{"pkcalc_case": 1,\n "drug" "phenytoin"}',
        [
            "Case file, line 2: the text is not valid JSON at column 9. Allowed: a JSON document. Check commas, quotes and brackets there."
        ],
    ),
    ('{"pkcalc_case": NaN}', ["Case file: NaN was given as a number. Allowed: text with its unit. Correct the value."]),
    (
        '{"pkcalc_case": 2}',
        [
            "Case file: the case was written in format version 2. Allowed: up to 1. It was made by a newer version of this program: update, or enter the case again."
        ],
    ),
    (
        '{"pkcalc_case": 100000000000000000000}',
        [
            "Case file: the case was written in format version far above 1. Allowed: up to 1. It was made by a newer version of this program: update, or enter the case again."
        ],
    ),
    (
        '{"pkcalc_case": 1' + "0" * 5000 + "}",
        ["Case file: a number has too many digits. Allowed: text with its unit. Correct it."],
    ),
    (
        '{"pkcalc_case": 1,\n "drug": "phenytoin",\n "drug": "phenytoin"}',
        ["Drug (line 3): it stands twice in the same place. Allowed: each key once. Remove one of the two."],
    ),
    (
        '{"pkcalc_case": 1, "drug": "phenytoin", "label": "\\ud800"}',
        ["Case file: a text holds half a character. Allowed: whole characters. Type the text again."],
    ),
    (
        '{"pkcalc_case": 1, "drug": "phenytoin",\n "label": "a\\u202eb"}',
        ["Label (line 2): the text holds characters that cannot be seen. Allowed: readable text. Type it again."],
    ),
    (
        "[[[[[[[[[[[[[[[[[[[[[[[[[",
        ["Case file: the text is nested too deeply. Allowed: at most 24 levels. Check the brackets."],
    ),
    (
        '{"pkcalc_case": 1,\n "drug": "phenytoin",\n "dose": [],\n "zzz": 1}',
        [
            'Dose (line 3): this key is not known. Allowed: <keys>. Did you mean "doses"?',
            "Zzz (line 4): this key is not known. Allowed: <keys>. Remove it.",
        ],
    ),
    (
        '{"pkcalc_case": true, "drug": 3, "patient": [], "doses": {}, "context": [],\n "plan": {"order_by_loss": "yes"}}',
        [
            "Pkcalc case (line 1): the value is not of the expected kind. Allowed: a whole number such as 1. Compare it with pkcalc schema.",
            'Drug (line 1): something other than text was given. Allowed: text such as "300 mg". Put number and unit in quotes.',
            "Patient (line 1): the value is not of the expected kind. Allowed: an object in { }. Compare it with pkcalc schema.",
            "Context (line 1): the value is not of the expected kind. Allowed: an object in { }. Compare it with pkcalc schema.",
            "Doses (line 1): the value is not of the expected kind. Allowed: a list in [ ]. Compare it with pkcalc schema.",
            "Plan, order by loss (line 2): the value is not of the expected kind. Allowed: true or false. Compare it with pkcalc schema.",
        ],
    ),
    (
        '{"pkcalc_case": 1, "drug": "phenytoin", "label": "' + "a" * 201 + '"}',
        ["Label (line 1): the text is too long. Allowed: at most 200 characters. Shorten it."],
    ),
    (
        '{"pkcalc_case": 1, "drug": "phenytoin", "proposed": [{},{},{},{},{},{},{},{},{},{},{},{},{},{},{},{},{},{},{},{},{}]}',
        ["Proposed (line 1): the list is too long. Allowed: at most 20 entries. Shorten it."],
    ),
    (
        '{"pkcalc_case": 1.5, "drug": "phenytoin",\n "levels": [\n  {"kind": "totl", "on_dose": "1"}]}',
        [
            "Pkcalc case (line 1): the value is not of the expected kind. Allowed: a whole number such as 1. Compare it with pkcalc schema.",
            "Level 1, value (line 3): it is missing. Allowed: a value. Add it.",
            "Level 1, kind (line 3): the word is not understood. Allowed: total, free or normalised. Choose one of them.",
            "Level 1, on dose (line 3): the value is not of the expected kind. Allowed: a whole number such as 1. Compare it with pkcalc schema.",
        ],
    ),
    (
        '{"pkcalc_case": 1, "drug": "phenytoin",\n "context": {"valproate": "maybe",\n "pregnancy": {"answr": "yes"}, "delivery": 3}}',
        [
            "Context, valproate (line 2): the answer is not understood. Allowed: yes, no or unknown. Choose one of them.",
            "Context, pregnancy, answer (line 3): it is missing. Allowed: a value. Add it.",
            'Context, pregnancy, answr (line 3): this key is not known. Allowed: answer, detail, since. Did you mean "answer"?',
            "Context, delivery (line 3): the answer is not understood. Allowed: yes, no or unknown. Choose one of them.",
        ],
    ),
]


@pytest.mark.parametrize(("change", "messages"), CHANGES)
def test_what_is_said_about_a_case(change: dict[str, Any], messages: list[str]) -> None:
    with pytest.raises(CaseError) as caught:
        plain(**change)
    assert [p.text for p in caught.value.problems] == full(messages)


@pytest.mark.parametrize(("text", "messages"), TEXTS)
def test_what_is_said_about_a_text(text: str, messages: list[str]) -> None:
    with pytest.raises(CaseError) as caught:
        read_case_text(text)
    assert [p.text for p in caught.value.problems] == full(messages)


def test_a_drug_file_that_cannot_be_loaded_is_said(monkeypatch: pytest.MonkeyPatch) -> None:
    def broken(name: str) -> object:
        raise DrugFileError("phenytoin.toml, binding: missing. Add it.")

    monkeypatch.setattr(case_module, "load_profile", broken)
    with pytest.raises(CaseError) as caught:
        case_module.read_case_text('{"pkcalc_case": 1, "drug": "phenytoin"}')
    assert str(caught.value).splitlines()[-1] == (
        "Drug (line 1): the drug file cannot be used: phenytoin.toml, binding: missing. Add it. Tell the maintainers."
    )


def test_a_text_of_too_many_entries_is_said() -> None:
    with pytest.raises(CaseError) as caught:
        case_module.parse_case_text("[" + "1," * 300_001 + "1]")
    assert str(caught.value) == (
        "Case file: the text has too many entries. Allowed: at most 300,000 entries. Give the case of one patient only."
    )


def test_a_flood_of_problems_is_cut_and_counted() -> None:
    wrong = ", ".join('{"value": 1, "kind": "total"}' for _ in range(130))
    with pytest.raises(CaseError) as caught:
        case_module.parse_case_text('{"pkcalc_case": 1, "drug": "phenytoin", "levels": [' + wrong + "]}")
    assert len(caught.value.problems) == 101
    assert caught.value.problems[-1].text == "Case file: 30 more problems were found. Mend these first."

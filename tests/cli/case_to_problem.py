"""A published or open case (tests/cases/NAME.json) as a problem file on stdout.
Usage: case_to_problem.py NAME [TITLE]"""
import json
import os
import sys

FOLDER = os.path.join(os.path.dirname(os.path.abspath(__file__)), "..", "cases")


def problem(name):
    case = json.load(open(os.path.join(FOLDER, name + ".json"), encoding="utf-8"))
    out = {"title": case.get("title", name), "setting": case["setting"]}
    out["plant"] = {key: case[key] for key in "ABCD" if case.get(key)}
    out["disturbance"] = {"W": case["W"]}
    if case["setting"] == "discrete" and case.get("V") and any(any(row) for row in case["V"]):
        out["noise"] = {"V": case["V"]}
    out["weights"] = {key: case[key] for key in "QRN" if case.get(key)}
    return out


if __name__ == "__main__":
    json.dump(problem(sys.argv[1]), sys.stdout, indent=1)
    print()

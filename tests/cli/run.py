#!/usr/bin/python3
"""Command-line tests as data.

usage: run.py PROGRAM [CASE-FILE...]

A case file holds cases separated by empty lines; `#` starts a comment line. Each case is a list of `key: value`:

    name     what is checked (starts a case)
    run      arguments of the program (as a shell would split them)
    sh       instead of run: a shell command; "$FLATGAIN" is the program
    status   expected exit status
    out      regular expression that must be found in standard output (multi-line; may be repeated)
    out-not  one that must not be found
    err      the same for standard error, and err-not; `err: ^$` and `out: ^$` mean empty
    json     Python expression in r, the JSON object on standard output, that must be true; the whole output
             must then be JSON, one object, or with `json-lines` a list r of objects, one a line
    file     a file that must exist after the run; no-file: one that must not

Every case runs in a fresh folder with a copy of tests/cli/data in it.
"""
import json
import os
import re
import shlex
import shutil
import subprocess
import sys
import tempfile

HERE = os.path.dirname(os.path.abspath(__file__))
KEYS = {"name", "run", "sh", "status", "out", "out-not", "err", "err-not", "json", "json-lines", "file", "no-file"}


def read_cases(path):
    cases, case = [], None
    with open(path, encoding="utf-8") as lines:
        for number, line in enumerate(lines, 1):
            line = line.rstrip("\n")
            if not line.strip() or line.startswith("#"):
                continue
            key, colon, value = line.partition(":")
            if not colon or key not in KEYS:
                sys.exit(f"{path}:{number}: expected one of {', '.join(sorted(KEYS))}")
            value = value.strip()
            if key == "name":
                case = []
                cases.append((value, case))
            case.append((key, value))
    return cases


def not_a_number(word):
    raise ValueError(f"{word} is not JSON")


def found(pattern, text):
    if pattern == "^$":
        return text == ""
    return re.search(pattern, text, re.MULTILINE) is not None


def check(case, status, out, err, folder):
    """Yields what is wrong."""
    stated = False
    for key, value in case:
        if key == "status":
            stated = True
            if status != int(value):
                yield f"exit status {status}, expected {value}"
        elif key in ("out", "err"):
            if not found(value, out if key == "out" else err):
                yield f"{key} lacks {value!r}"
        elif key in ("out-not", "err-not"):
            if found(value, out if key == "out-not" else err):
                yield f"{key[:3]} has {value!r}"
        elif key in ("json", "json-lines"):
            try:
                if key == "json":
                    r = json.loads(out, parse_constant=not_a_number)
                else:
                    r = [json.loads(line, parse_constant=not_a_number) for line in out.splitlines()]
                if not eval(value, {"r": r, "abs": abs, "len": len, "all": all, "any": any, "set": set}):
                    yield f"not true: {value}"
            except Exception as problem:  # a failed expression is a failed test
                yield f"{value}: {type(problem).__name__} {problem}"
        elif key == "file" and not os.path.exists(os.path.join(folder, value)):
            yield f"no file {value}"
        elif key == "no-file" and os.path.lexists(os.path.join(folder, value)):
            yield f"there is a file {value}"
    if not stated:
        yield "the case states no exit status"


def run(case, program):
    fields = dict(case)
    with tempfile.TemporaryDirectory() as folder:
        shutil.copytree(os.path.join(HERE, "data"), folder, dirs_exist_ok=True)
        environment = {k: v for k, v in os.environ.items() if k != "NO_COLOR"}
        environment.update(FLATGAIN=program, LC_ALL="C.UTF-8")
        if "sh" in fields:
            command = ["/bin/sh", "-c", fields["sh"]]
        else:
            command = [program] + shlex.split(fields["run"])
        try:
            done = subprocess.run(command, cwd=folder, env=environment, stdin=subprocess.DEVNULL,
                                  stdout=subprocess.PIPE, stderr=subprocess.PIPE, timeout=120, check=False)
        except subprocess.TimeoutExpired:
            return ["no end after 120 s"], "", ""
        out, err = done.stdout.decode("utf-8", "replace"), done.stderr.decode("utf-8", "replace")
        return list(check(case, done.returncode, out, err, folder)), out, err


def main():
    if len(sys.argv) < 2:
        sys.exit(__doc__)
    program = os.path.abspath(sys.argv[1])
    files = sys.argv[2:]
    if not files:
        folder = os.path.join(HERE, "cases")
        files = sorted(os.path.join(folder, name) for name in os.listdir(folder) if name.endswith(".case"))
    passed = failed = 0
    for path in files:
        for name, case in read_cases(path):
            wrong, out, err = run(case, program)
            if not wrong:
                passed += 1
                continue
            failed += 1
            print(f"FAILED {os.path.basename(path)}: {name}")
            for text in wrong:
                print(f"  {text}")
            print(f"  stdout: {out[:300]!r}\n  stderr: {err[:300]!r}")
    print(f"{passed} passed, {failed} failed")
    return 1 if failed or not passed else 0


if __name__ == "__main__":
    sys.exit(main())

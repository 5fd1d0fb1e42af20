"""The example of README.md run as printed: its problem file is tuned and the text compared with the block
that follows, numbers to three digits (other BLAS libraries round differently).
Usage: check_readme.py PROGRAM"""
import re
import subprocess
import sys
import tempfile

NUMBER = re.compile(r"[-+]?\d+(?:\.\d+)?(?:e[-+]?\d+)?")


def same(a, b):
    """Equal words, numbers within 0.2 percent; tiny residuals only need to be tiny."""
    if NUMBER.sub("#", a).split() != NUMBER.sub("#", b).split():
        return False
    pairs = zip(NUMBER.findall(a), NUMBER.findall(b))
    return all(abs(float(x) - float(y)) <= 2e-3 * abs(float(x)) + 1e-9 for x, y in pairs)


readme = open("README.md", encoding="utf-8").read()
problem = re.search(r"```yaml\n(.*?)```", readme, re.S).group(1)
expected = re.search(r"```text\n(.*?)```", readme, re.S).group(1).rstrip("\n").split("\n")
with tempfile.NamedTemporaryFile("w", suffix=".yaml") as file:
    file.write(problem)
    file.flush()
    run = subprocess.run([sys.argv[1], "tune", file.name], capture_output=True, text=True, check=False)
printed = run.stdout.rstrip("\n").split("\n")
bad = [(e, p) for e, p in zip(expected, printed) if not same(e, p)]
if len(expected) != len(printed):
    bad.append((f"{len(expected)} lines", f"{len(printed)} lines"))
if run.returncode != 0:
    bad.append(("exit status 0", str(run.returncode)))
for e, p in bad:
    print(f"README: {e}\nprogram: {p}")
print(f"{int(not bad)} passed, {int(bool(bad))} failed")
sys.exit(bool(bad))

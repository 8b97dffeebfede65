"""The peer of benches/peer.rs: prints the seconds that its computing takes (reading not included, best of five, after one
to warm up) and the F of the first within factor."""

import sys
import time
import warnings

import pandas
import pingouin

warnings.filterwarnings("ignore")
kind, path = sys.argv[1:]
data = pandas.read_csv(path)


def one():
    return pingouin.rm_anova(data, dv="value", within="a", subject="subject", correction=True, detailed=True)


def two():
    return pingouin.rm_anova(data, dv="value", within=["a", "b"], subject="subject", detailed=True)


def mixed():
    return pingouin.mixed_anova(data, dv="value", within="a", between="group", subject="subject", correction=True)


if kind == "mixed":
    data = data.groupby(["subject", "group", "a"], as_index=False)["value"].mean()
work = {"one": one, "two": two, "mixed": mixed}[kind]
times = []
for _ in range(6):
    start = time.perf_counter()
    result = work()
    times.append(time.perf_counter() - start)
row = result[result["Source"] == "a"].iloc[0]
print(min(times[1:]), row["F"])

# SPDX-License-Identifier: MIT
"""Labels that are times, against Python's datetime.fromisoformat.

Random instants in every form that both know; the same with a few characters changed, where one must take what the other
takes, but for the forms that only one of them means to know; ordinal dates and weeks of every year against strftime.
Under a foreign locale and time zone, which must not matter. Prints TAP.
"""
import datetime as dt
import os
import random
import re
import shlex
import subprocess
import sys
import tempfile

ROOT = os.path.dirname(os.path.dirname(os.path.dirname(os.path.abspath(__file__))))
BUILD = os.path.join(ROOT, os.environ.get("BUILD", "build"))
SEED = int(os.environ.get("TEST_SEED", "47"))
LIBRARIES = "-lcholmod -lamd -lcolamd -lsuitesparseconfig -llapacke -lopenblas -ljansson -lisal -lz -lm -pthread"
EPOCH = dt.datetime(1970, 1, 1)
tests = failures = 0


def check(text, good):
    global tests, failures
    tests += 1
    failures += not good
    print(f"{'ok' if good else 'not ok'} {tests} - {text}")


def build_driver(folder):
    driver = os.path.join(folder, "driver")
    command = [*shlex.split(os.environ.get("CC", "gcc")), "-std=c17", "-O1", "-D_GNU_SOURCE",
               *shlex.split(os.environ.get("SANITIZE", "")),
               "-I" + os.path.join(ROOT, "src"), "-I" + os.path.join(ROOT, "src", "include"),
               os.path.join(ROOT, "tests", "reference", "time_labels_driver.c"),
               os.path.join(BUILD, "libfescue.a"), *LIBRARIES.split(), "-o", driver]
    subprocess.run(command, check=True)
    return driver


def parsed_here(driver, labels):
    surroundings = dict(os.environ, TZ="America/St_Johns", LC_ALL="C.UTF-8")
    out = subprocess.run([driver], input="".join(label + "\n" for label in labels), text=True, check=True,
                         stdout=subprocess.PIPE, env=surroundings).stdout.split("\n")[:-1]
    return [None if line == "none" else tuple(int(part) for part in line.split()) for line in out]


def parsed_there(label):
    """The same by Python, to its microseconds."""
    try:
        moment = dt.datetime.fromisoformat(label)
        has_offset = moment.tzinfo is not None
        seconds = moment.replace(tzinfo=None) - EPOCH
        if has_offset:
            seconds -= moment.utcoffset()
    except (ValueError, OverflowError):
        return None
    return seconds.days * 86400 + seconds.seconds, seconds.microseconds * 1000, int(has_offset)


def random_label(rng):
    moment = dt.datetime.min + dt.timedelta(microseconds=rng.randrange(9998 * 365 * 86400 * 10**6))
    year, week, day = moment.isocalendar()
    if rng.random() < 0.5 or not 1 <= year <= 9999:
        date = rng.choice([f"{moment:%Y}".zfill(4) + moment.strftime(form) for form in ("-%m-%d", "%m%d")])
    else:
        date = rng.choice([f"{year:04d}-W{week:02d}-{day}", f"{year:04d}W{week:02d}{day}", f"{year:04d}-W{week:02d}"])
    if rng.random() < 0.2 or len(date) == 8 and "-W" in date:
        return date
    time = moment.strftime(rng.choice(["%H", "%H:%M", "%H%M", "%H:%M:%S", "%H%M%S"]))
    if len(time) in (8, 6) and rng.random() < 0.5:
        time += rng.choice(".,") + f"{moment.microsecond:06d}"[:rng.randint(1, 6)]
    offset = rng.choice(["", "Z", "+%02d", "-%02d", "+%02d:%02d", "-%02d%02d"])
    offset = offset.replace("%02d", f"{rng.randrange(24):02d}", 1).replace("%02d", f"{rng.randrange(60):02d}")
    return date + rng.choice("T ") + time + offset


def mutated(rng, label):
    characters = list(label)
    for _ in range(rng.randint(1, 2)):
        at = rng.randrange(len(characters))
        kind = rng.randrange(3)
        if kind == 0:
            characters[at] = rng.choice("0123456789-:TWZ+., x")
        elif kind == 1 and len(characters) > 1:
            del characters[at]
        else:
            characters.insert(at, rng.choice("0123456789-:TWZ+., "))
    return "".join(characters)


# Forms that only we mean to know, or that both know and read differently: Python takes a fraction of an hour or a minute
# for one of a second.
ONLY_HERE = re.compile(r"""^\d{4}-\d\d$ | ^\d{4}-?\d{3}([Tt ]|$)     # a month, an ordinal date
                           | [Tt ]\d\d(:?\d\d)?[.,]\d             # a fraction of an hour or a minute
                           | [Tt ]\d\d:?\d\d:?60 | [Tt ]24         # a leap second, the end of a day
                           | z$ """, re.X)
# The grammar, written down a second time: what of it Python takes is to be taken. (Python takes much else beside it.)
GRAMMAR = re.compile(r"""^(\d{4}-\d\d-\d\d | \d{8} | \d{4}-W\d\d-\d | \d{4}W\d{3})
                         ([T ]\d\d(:\d\d(:\d\d([.,]\d+)?)?|\d\d(\d\d([.,]\d+)?)?)?
                         (Z|[+-]\d\d(:?[0-5]\d)?)?)?$ """, re.X)


def agree(label, here, there):
    if here is None:
        return there is None or not GRAMMAR.search(label)
    if ONLY_HERE.search(label):
        return True
    return there is not None and (here[0], here[1] // 1000, here[2]) == (there[0], there[1] // 1000, there[2])


def check_mutations(rng, driver):
    labels = sorted({mutated(rng, random_label(rng)) for _ in range(60000)})
    triples = [(label, here, parsed_there(label)) for label, here in zip(labels, parsed_here(driver, labels))]
    wrong = [triple for triple in triples if not agree(*triple)]
    taken = sum(here is not None and there is not None for _, here, there in triples)
    print("#", len(labels), "labels,", taken, "of them taken by both")
    for one in wrong[:15]:
        print("#", one)
    check("labels with characters changed: taken where Python takes them, for the same instant", not wrong and
          taken > 2000)


def main():
    print(f"# seed {SEED}")
    rng = random.Random(SEED)
    with tempfile.TemporaryDirectory() as folder:
        driver = build_driver(folder)
        labels = [random_label(rng) for _ in range(40000)]
        pairs = [(label, here, parsed_there(label)) for label, here in zip(labels, parsed_here(driver, labels))]
        known = [pair for pair in pairs if pair[2] is not None]
        wrong = [pair for pair in known if pair[1] != pair[2]]
        for one in wrong[:5]:
            print("#", one)
        check("random instants in all forms are the same to the microsecond", not wrong and len(known) > 35000)
        days = [dt.date(year, 1, 1) + dt.timedelta(days=k) for year in (1, 4, 1900, 2000, 2023, 2024, 9999)
                for k in range(366) if year < 9999 or k < 365]
        ordinal = [f"{day.year:04d}-{day.timetuple().tm_yday:03d}" for day in days]
        plain = [day.isoformat() for day in days]
        check("every day of a year by its number", parsed_here(driver, ordinal) == parsed_here(driver, plain))
        check_mutations(rng, driver)
    print(f"1..{tests}")
    return failures > 0


if __name__ == "__main__":
    sys.exit(main())

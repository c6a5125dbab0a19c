"""Golden states of joint moments: what they were fed.  Run it once for a new format version.

States that are there already stay as they are, for they show what earlier releases wrote.
"""

import sys
from pathlib import Path

import momentstream as ms
from momentstream.codec.frames import VERSION

FOLDER = Path(__file__).parent / "data" / "golden_joint"
ROWS = [[float(i % 5), float(i * i % 7) - 2.5, 40.0 - i] for i in range(60)]
LONG = [[float(i % 11), float(i * i % 13)] for i in range(3 * 2048 + 9)]
TINY = [[2.0**-900 * a, 2.0**900 * b] for a, b, _ in ROWS]
WEIGHTS = [(i % 4) * 0.25 for i in range(60)]


def fed(rows, beside=None, **settings):
    return ms.JointMoments(len(rows[0]), 4, **settings).update(rows, beside)


CASES = {
    "order_4": (lambda: fed(ROWS), ROWS, None),
    "names": (lambda: fed(ROWS, names=["inlet", "Rücklauf", "管道"]), ROWS, None),
    "reliabilities": (lambda: fed(ROWS, WEIGHTS, weights="reliability"), ROWS, WEIGHTS),
    "many_blocks": (lambda: fed(LONG), LONG, None),
    "own_scales": (lambda: fed(TINY), TINY, None),
}


def main():
    folder = FOLDER / f"format_{VERSION}"
    folder.mkdir(parents=True, exist_ok=True)
    for name, (make, _, _) in CASES.items():
        for form, resume in (("settled", False), ("working", True)):
            path = folder / f"{name}.{form}.bin"
            if not path.exists():
                path.write_bytes(make().to_bytes(resume=resume))
    sys.stdout.write(f"{len(list(folder.iterdir()))} states in {folder}\n")


if __name__ == "__main__":
    main()

"""Writes the frames of test/support/messages.ts with another CBOR encoder than ours (Python, cbor2).

python3 make.py           (needs the package cbor2)
python3 make.py --check   compares the files with what would be written, and reads them back; writes nothing
"""

import pathlib
import struct
import sys

import cbor2


def vector(*values):
    return cbor2.CBORTag(86, struct.pack(f"<{len(values)}d", *values))


def point(want, *values):
    return {"point": vector(*values), "want": want}


def answered(value, gradient=None, diagonal=None, curvature=None):
    return {"value": value, "gradient": gradient, "diagonal": diagonal, "curvature": curvature}


def sums(weight, weighted, exposure, most, saturated):
    return {
        "weightSum": weight, "weightedSum": weighted, "exposureSum": exposure, "least": 0, "most": most,
        "saturatedLoss": saturated,
    }


G, D, H = vector(1, 2), vector(3, 4), vector(3, 0.5, 4)

frames = {
    "hello": {
        "kind": "hello", "version": 1, "site": "lindell-bay", "shard": {"index": 1, "of": 2},
        "software": "commonfit 0.1.0", "kernel": "typescript",
    },
    "welcome": {"kind": "welcome", "version": 1, "software": "commonfit 0.1.0", "frameBytesMost": 134217728},
    "prepare": {
        "kind": "prepare", "run": "r1", "specification": '{"title":"Pipe breaks"}',
        "digest": "0123456789abcdef" * 4,
        "scaling": {
            "rowCountTotal": 1200, "kept": [0, 2], "center": vector(31.5, 0.25), "scale": vector(12, 0.5),
        },
    },
    "run-end": {"kind": "run-end", "run": "r1", "outcome": "solved"},
    "ask": {
        "kind": "ask", "run": "r1", "ask": 7,
        "work": [
            {"work": "survey"},
            {
                "work": "proximal",
                "problems": [
                    {
                        "problem": 0, "part": None, "center": vector(1, -0.5), "scale": 0.25, "diagonal": vector(1, 2),
                        "diagonalAsk": 7, "start": vector(0, 0), "startAsk": 7,
                    },
                    {
                        "problem": 1, "part": {"fold": "2", "side": "training"}, "center": vector(1, -0.5), "scale": 0.1, "diagonal": None,
                        "diagonalAsk": 3, "start": None, "startAsk": 6,
                    },
                ],
            },
            {
                "work": "evaluate", "problem": 0, "part": None,
                "points": [point(w, 1, 2) for w in ("value", "gradient", "diagonal", "curvature")],
                "ownFit": {"at": 3, "hold": 0.3},
                "sketch": {"at": 2, "directions": vector(1, 0, 1, 1), "columns": 2},
            },
            {
                "work": "evaluate", "problem": 0, "part": {"fold": "2", "side": "held-out"},
                "points": [point("value", 0, 0)], "ownFit": None, "sketch": None,
            },
            {"work": "factor", "folds": ["1", "2"]},
            {
                "work": "joint", "problem": 2, "start": vector(1, 2), "curvature": H, "linear": vector(1, 1),
                "l1": vector(0, 0.1), "l2": vector(0, 0.2),
            },
            {"work": "scores", "problem": 3, "point": G, "meat": True, "clustered": True},
            {"work": "scores", "problem": 3, "point": G, "meat": False, "clustered": False},
            {"work": "site-fit", "problem": 4, "start": G},
            {"work": "site-fit", "problem": 5, "start": G},
            {
                "work": "margins", "problem": 6, "point": G,
                "settings": [
                    {"set": "level", "column": "material", "level": "steel"},
                    {"set": "slope", "column": "age_years"},
                ],
            },
            {
                "work": "quality", "problem": 7, "point": G, "edges": vector(-1, 0.5), "inverse": H,
                "leverageHigh": 0.25,
            },
            {
                "work": "quality", "problem": 7, "point": G, "edges": vector(), "inverse": None,
                "leverageHigh": 0.25,
            },
        ],
    },
    "answer": {
        "kind": "answer", "run": "r1", "ask": 7,
        "work": [
            {
                "work": "survey", "rowsUsed": 300, "rowsDropped": 4,
                "columns": ["age_years", "material=steel"],
                "mean": vector(30, 0.2), "centredSquares": vector(4000, 48),
                "response": sums(300, 120, 310.5, 9, -12.75),
                "folds": [
                    {
                        "fold": "1", "rowsUsed": 180, "mean": vector(31, 0.25),
                        "centredSquares": vector(2500, 33.75), "response": sums(180, 70, 190.5, 9, -8.5),
                    },
                    {
                        "fold": "2", "rowsUsed": 120, "mean": vector(28.5, 0.125),
                        "centredSquares": vector(1400, 13.125), "response": sums(120, 50, 120, 6, -4.25),
                    },
                ],
                "allowance": {
                    "leave": ["counts", "moments"], "curvatureMost": 3, "numbersMost": None,
                    "roundsMost": 2000,
                },
                "notes": ["diameter_mm looks like inches"],
            },
            {
                "work": "proximal",
                "problems": [
                    {"problem": 0, "point": vector(0.5, 0.1), "newtonSteps": 3},
                    {"problem": 1, "point": vector(0.5, 0.125), "newtonSteps": 1},
                ],
            },
            {
                "work": "evaluate", "problem": 0,
                "points": [answered(1.5), answered(1.5, G), answered(1.5, G, D), answered(1.5, G, D, H)],
                "ownFit": {"curvature": H, "linear": vector(1, 1)},
                "sketch": vector(3, 0.5, 3.5, 4.5),
            },
            {"work": "evaluate", "problem": 0, "points": [answered(2)], "ownFit": None, "sketch": None},
            {
                "work": "factor",
                "factors": [vector(1, 0.5, 2, 0.25, 0.125, 3), vector(2, 0.5, 1, 0.125, 0.25, 4)],
            },
            {
                "work": "joint", "problem": 2, "start": {"value": 1.5, "gradient": G, "curvature": H},
                "point": vector(0.5, 0),
                "end": {"value": 1.25, "gradient": vector(0.5, 1), "curvature": vector(2, 0.5, 4)},
                "newtonSteps": 4,
            },
            {
                "work": "scores", "problem": 3, "gradient": G, "meat": H, "clustered": vector(5, 0.25, 6),
                "clusterCount": 12, "pearson": 290.5,
            },
            {
                "work": "scores", "problem": 3, "gradient": G, "meat": None, "clustered": None,
                "clusterCount": 0, "pearson": 290.5,
            },
            {
                "work": "site-fit", "problem": 4,
                "fit": {
                    "point": vector(0.5, 0), "value": 1.25, "curvature": vector(3, 0, 0), "undetermined": [1],
                    "pearson": 280.5,
                },
                "reason": None,
            },
            {"work": "site-fit", "problem": 5, "fit": None, "reason": "The responses are all 0."},
            {
                "work": "margins", "problem": 6, "rows": 300,
                "settings": [{"sum": 120.5, "gradient": vector(100, 20)}, {"sum": 0.5, "gradient": G}],
            },
            {
                "work": "quality", "problem": 7, "rows": 300, "binRows": vector(100, 0, 190),
                "binPredicted": vector(10.5, 0, 90.25), "binObserved": vector(11, 0, 95),
                "rowsSuppressed": 10, "pearsonSum": 1.5, "pearsonSquares": 290.5,
                "leverage": {"sum": 0.75, "most": 0.125, "rowsHigh": 2},
                "zeros": {"observed": 200, "expected": 195.5},
            },
            {
                "work": "quality", "problem": 7, "rows": 300, "binRows": vector(300),
                "binPredicted": vector(120.5), "binObserved": vector(120), "rowsSuppressed": 0,
                "pearsonSum": 1.5, "pearsonSquares": 290.5, "leverage": None, "zeros": None,
            },
        ],
    },
    "refusal": {
        "kind": "refusal", "run": "r1", "ask": 7, "code": "policy-curvature",
        "message": "The policy of this site lets no curvature matrix leave.", "remedy": None,
    },
}

here = pathlib.Path(__file__).parent


def in_lines(text):
    return "".join(text[at : at + 100] + "\n" for at in range(0, len(text), 100))


def wrong(name, message):
    kept = (here / f"{name}.hex").read_text()
    if kept != in_lines(cbor2.dumps(message, canonical=True).hex()):
        return f"{name}.hex is not what cbor2 writes"
    if cbor2.loads(bytes.fromhex(kept)) != message:
        return f"{name}.hex does not read as the message it was written from"
    return None


if "--check" in sys.argv[1:]:
    found = [text for text in (wrong(name, message) for name, message in frames.items()) if text]
    stray = {path.stem for path in here.glob("*.hex")} - set(frames)
    found += [f"{name}.hex is of no message" for name in sorted(stray)]
    if found:
        sys.exit("\n".join(found))
    print(f"{len(frames)} frames checked")
else:
    for name, message in frames.items():
        (here / f"{name}.hex").write_text(in_lines(cbor2.dumps(message, canonical=True).hex()))

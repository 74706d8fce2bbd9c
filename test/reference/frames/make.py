"""Writes the frames of test/support/messages.ts with another CBOR encoder than ours (Python, cbor2).

python3 make.py   (in this folder; needs the package cbor2)
"""

import pathlib
import struct

import cbor2


def vector(*values):
    return cbor2.CBORTag(86, struct.pack(f"<{len(values)}d", *values))


def point(want, *values):
    return {"point": vector(*values), "want": want}


def answered(value, gradient=None, diagonal=None, curvature=None):
    return {"value": value, "gradient": gradient, "diagonal": diagonal, "curvature": curvature}


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
                        "problem": 0, "center": vector(1, -0.5), "scale": 0.25, "diagonal": vector(1, 2),
                        "diagonalAsk": 7, "start": vector(0, 0), "startAsk": 7,
                    },
                    {
                        "problem": 1, "center": vector(1, -0.5), "scale": 0.1, "diagonal": None,
                        "diagonalAsk": 3, "start": None, "startAsk": 6,
                    },
                ],
            },
            {
                "work": "evaluate", "problem": 0,
                "points": [point(w, 1, 2) for w in ("value", "gradient", "diagonal", "curvature")],
                "ownFit": {"at": 3, "hold": 0.3},
                "sketch": {"at": 2, "directions": vector(1, 0, 1, 1), "columns": 2},
            },
            {
                "work": "evaluate", "problem": 0, "points": [point("value", 0, 0)], "ownFit": None,
                "sketch": None,
            },
            {"work": "factor"},
            {
                "work": "joint", "problem": 2, "start": vector(1, 2), "curvature": H, "linear": vector(1, 1),
                "l1": vector(0, 0.1), "l2": vector(0, 0.2),
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
                "response": {
                    "weightSum": 300, "weightedSum": 120, "exposureSum": 310.5, "least": 0, "most": 9,
                    "saturatedLoss": -12.75,
                },
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
            {"work": "factor", "factor": vector(1, 0.5, 2, 0.25, 0.125, 3)},
            {
                "work": "joint", "problem": 2, "start": {"value": 1.5, "gradient": G, "curvature": H},
                "point": vector(0.5, 0),
                "end": {"value": 1.25, "gradient": vector(0.5, 1), "curvature": vector(2, 0.5, 4)},
                "newtonSteps": 4,
            },
        ],
    },
    "refusal": {
        "kind": "refusal", "run": "r1", "ask": 7, "code": "policy-curvature",
        "message": "The policy of this site lets no curvature matrix leave.", "remedy": None,
    },
}

here = pathlib.Path(__file__).parent
for name, message in frames.items():
    text = cbor2.dumps(message, canonical=True).hex()
    lines = [text[at : at + 100] for at in range(0, len(text), 100)]
    (here / f"{name}.hex").write_text("\n".join(lines) + "\n")

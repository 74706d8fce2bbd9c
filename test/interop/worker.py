"""A minimal worker for the commonfit protocol, version 1, written from protocol/README.md and protocol/messages.cddl.

    python3 worker.py --url ws://127.0.0.1:7443 --site NAME --token-file FILE --table FILE.csv [--pause SECONDS]

It answers `survey`, `proximal`, `evaluate`, `joint` and `factor` for the losses squared, logistic and poisson, with terms of
numbers, of levels and their products, and refuses the rest with `not-supported`. It has no policy and no ledger: a worker
for custodians needs both. It keeps no vectors between asks and says `memory-missing` where one was left out. With `--pause` it waits before each answer, as a
slow machine would.

Needs Python 3.11, websockets, cbor2 and numpy.
"""

import argparse
import asyncio
import csv
import hashlib
import json
import math
import pathlib
import struct
import sys
import time

import cbor2
import numpy as np
import websockets

FRAME_BYTES_MOST = 134217728
VALUE_MOST = 1e300
# A connection closed with one of these is not worth opening again.
FINAL_CLOSE_CODES = {4002, 4003, 4004, 4007}


class Refused(Exception):
    """An ask that is answered with a refusal."""

    def __init__(self, code, message, remedy=None):
        super().__init__(message)
        self.code, self.message, self.remedy = code, message, remedy


# ---- encoding


def vector(values):
    values = np.asarray(values, dtype="<f8").ravel()
    if not np.all(np.isfinite(values)):
        raise Refused("number-not-finite", "A result is not finite.")
    return cbor2.CBORTag(86, values.tobytes())


def number(value):
    if not math.isfinite(value):
        raise Refused("number-not-finite", "A result is not finite.")
    return float(value)


def array(item):
    if not isinstance(item, cbor2.CBORTag) or item.tag != 86:
        raise Refused("frame-malformed", "A vector is tag 86 on a byte string.")
    return np.frombuffer(item.value, dtype="<f8").astype(float)


def packed_lower(matrix):
    return vector(matrix[np.tril_indices(len(matrix))])


def unpacked_lower(values, p):
    matrix = np.zeros((p, p))
    matrix[np.tril_indices(p)] = values
    return matrix + np.tril(matrix, -1).T


# ---- losses: value, slope and curvature a row, and the value at the best eta


def log1pexp(eta):
    return np.logaddexp(0.0, eta)


def xlogx(values):
    return np.where(values > 0, values * np.log(np.where(values > 0, values, 1.0)), 0.0)


class Squared:
    value = staticmethod(lambda y, eta: 0.5 * (y - eta) ** 2)
    slope = staticmethod(lambda y, eta: eta - y)
    curvature = staticmethod(lambda y, eta: np.ones_like(eta))
    saturated = staticmethod(lambda y: np.zeros_like(y))
    allows = staticmethod(lambda y: np.full(y.shape, True))


class Logistic:
    value = staticmethod(lambda y, eta: log1pexp(eta) - y * eta)
    slope = staticmethod(lambda y, eta: np.exp(-log1pexp(-eta)) - y)
    curvature = staticmethod(lambda y, eta: np.exp(-log1pexp(-eta) - log1pexp(eta)))
    saturated = staticmethod(lambda y: -xlogx(y) - xlogx(1 - y))
    allows = staticmethod(lambda y: (y == 0) | (y == 1))


class Poisson:
    value = staticmethod(lambda y, eta: np.exp(eta) - y * eta)
    slope = staticmethod(lambda y, eta: np.exp(eta) - y)
    curvature = staticmethod(lambda y, eta: np.exp(eta))
    saturated = staticmethod(lambda y: y - xlogx(y))
    allows = staticmethod(lambda y: y >= 0)


LOSSES = {"squared": Squared, "logistic": Logistic, "poisson": Poisson}


# ---- the table and the design


def read_table(path):
    with open(path, newline="", encoding="utf-8") as file:
        return list(csv.DictReader(file))


def texts(rows, column):
    if rows and column not in rows[0]:
        raise Refused("column-missing", f"There is no column {column}.")
    return [row[column] for row in rows]


def finite(text, column):
    try:
        value = float(text)
    except ValueError:
        raise Refused("column-not-numeric", f"Column {column} holds text.") from None
    if not math.isfinite(value):
        raise Refused("value-not-finite", f"Column {column} holds a value that is not finite.")
    return value


def numbers(rows, column):
    return np.array([finite(text, column) for text in texts(rows, column)])


def as_number(text):
    try:
        return float(text)
    except ValueError:
        return None


def level_of(text, levels):
    """The level that a text is: the same text, or the same number; None where it is none."""
    if text in levels:
        return text
    value = as_number(text)
    return None if value is None else next((level for level in levels if as_number(level) == value), None)


def transformed(values, transform, column):
    with np.errstate(all="ignore"):
        if transform == "log":
            values = np.log(values)
        elif transform == "sqrt":
            values = np.sqrt(values)
        elif isinstance(transform, dict):
            values = values ** transform["power"]
    if not np.all(np.isfinite(values)):
        raise Refused("value-not-finite", f"The transform of {column} is not finite somewhere.")
    return values


def shown(value):
    """A number as the canonical form writes it."""
    return str(int(value)) if value == int(value) else repr(value)


def numeric_name(term, terms):
    column, transform = term["column"], term["transform"]
    if isinstance(transform, dict):
        return f"{column}^{shown(transform['power'])}"
    bare = [t for t in terms if t.get("column") == column and not isinstance(t.get("transform"), dict)]
    return column if transform == "none" or len(bare) == 1 else f"{transform}({column})"


def single_columns(term, terms, rows):
    """Names and values of the design columns of a term that is no product."""
    column = term["column"]
    if "levels" not in term:
        values = transformed(numbers(rows, column), term["transform"], column)
        return [(numeric_name(term, terms), values)]
    found = texts(rows, column)
    levels, baseline = term["levels"], term["baseline"]
    held = [level_of(text, levels) for text in found]
    if any(level is None for level in held):
        raise Refused("level-unknown", f"Column {column} holds a level that is not listed.")
    named = [level for level in levels if level != baseline]
    return [(f"{column}={level}", np.array([float(h == level) for h in held])) for level in named]


def design_columns(terms, rows):
    by_name, by_column, columns = {}, {}, []
    for term in terms:
        if "product" in term:
            continue
        made = single_columns(term, terms, rows)
        name = term["column"] if "levels" in term else numeric_name(term, terms)
        by_name.setdefault(name, made)
        by_column.setdefault(term["column"], made)
    for term in terms:
        if "product" not in term:
            columns += single_columns(term, terms, rows)
            continue
        combined = [("", np.ones(len(rows)))]
        for factor in term["product"]:
            choices = by_name.get(factor) or by_column[factor]
            combined = [
                (name if head == "" else f"{head}:{name}", values * more)
                for head, values in combined
                for name, more in choices
            ]
        columns += combined
    return columns


class Site:
    """The rows of this site as one specification uses them: (y, a, w, o)."""

    def __init__(self, specification, table):
        check_supported(specification)
        self.loss = LOSSES[specification["loss"]]
        rows, self.rows_dropped = complete_rows(specification, table)
        if not rows:
            raise Refused("no-rows", "No row can be used.")
        positive = specification["response"].get("positive")
        response = specification["response"]["column"]
        if positive is None:
            self.y = numbers(rows, response)
        else:
            self.y = np.array([float(level_of(text, [positive]) is not None) for text in texts(rows, response)])
        if not np.all(self.loss.allows(self.y)):
            raise Refused("response-range", "The response holds a value that the loss does not allow.")
        self.w, self.o = np.ones(len(rows)), np.zeros(len(rows))
        if "weights" in specification:
            self.w = numbers(rows, specification["weights"]["column"])
            if np.any(self.w < 0):
                raise Refused("weight-negative", "A weight is negative.")
        if "offset" in specification:
            self.o = numbers(rows, specification["offset"]["column"])
        if "exposure" in specification:
            exposure = numbers(rows, specification["exposure"]["column"])
            if np.any(exposure <= 0):
                raise Refused("exposure-not-positive", "The exposure is not above zero somewhere.")
            self.o = np.log(exposure)
        columns = design_columns(specification["terms"], rows)
        self.names = [name for name, _ in columns]
        self.a = np.column_stack([values for _, values in columns]) if columns else np.zeros((len(rows), 0))


def used_columns(specification):
    used = {specification["response"]["column"]}
    used |= {specification[role]["column"] for role in ("exposure", "offset", "weights") if role in specification}
    return used | {term["column"] for term in specification["terms"] if "column" in term}


def complete_rows(specification, table):
    used = used_columns(specification)
    for column in used:
        texts(table, column)
    complete = [row for row in table if all(row[column] not in ("", None) for column in used)]
    if len(complete) < len(table) and specification["missing"] == "refuse":
        raise Refused("value-missing", "A used column has rows without a value.")
    return complete, len(table) - len(complete)


def check_supported(specification):
    supported = (
        isinstance(specification["loss"], str)
        and specification["intercept"] in ("shared", "none")
        and "folds" not in specification.get("choose", {})
    )
    if not supported:
        raise Refused(
            "not-supported",
            "This worker takes squared, logistic and poisson losses, a shared intercept or none, and no folds.",
        )


# ---- the mathematics of "What is computed"


class Problem:
    """phi of this site in the coefficients of the solver columns."""

    def __init__(self, site, scaling, intercept):
        self.loss, self.y, self.w, self.o = site.loss, site.y, site.w, site.o
        self.total = scaling["rowCountTotal"]
        kept = np.array(scaling["kept"], dtype=int)
        x = (site.a[:, kept] - array(scaling["center"])) / array(scaling["scale"])
        self.x = np.column_stack([np.ones(len(x)), x]) if intercept else x
        self.p = self.x.shape[1]

    def eta(self, theta):
        return self.o + self.x @ theta

    def value(self, theta):
        with np.errstate(over="ignore"):
            value = float(np.sum(self.w * self.loss.value(self.y, self.eta(theta))) / self.total)
        return min(value, VALUE_MOST)

    def gradient(self, theta):
        with np.errstate(over="ignore"):
            return self.x.T @ (self.w * self.loss.slope(self.y, self.eta(theta))) / self.total

    def row_curvature(self, theta):
        with np.errstate(over="ignore"):
            return self.w * self.loss.curvature(self.y, self.eta(theta)) / self.total

    def curvature(self, theta):
        half = self.x * np.sqrt(self.row_curvature(theta))[:, None]
        return half.T @ half

    def minimise(self, start, bowl, linear):
        """argmin of phi + x'Bx/2 - c'x by Newton's method with backtracking; the point and the steps."""
        x = start.copy()
        objective = lambda at: self.value(at) + 0.5 * at @ bowl @ at - linear @ at
        for steps in range(1, 101):
            gradient = self.gradient(x) + bowl @ x - linear
            step = np.linalg.solve(self.curvature(x) + bowl, -gradient)
            fall = -(gradient @ step)
            if np.max(np.abs(step), initial=0) <= 1e-13 * (1 + np.max(np.abs(x), initial=0)):
                return x + step, steps
            before, length = objective(x), 1.0
            while length > 1e-12 and not (
                objective(x + length * step) <= before - 1e-4 * length * fall + 1e-14 * (1 + abs(before))
            ):
                length /= 2
            x = x + length * step
        return x, steps

    def quadratic(self, theta):
        return {
            "value": number(self.value(theta)),
            "gradient": vector(self.gradient(theta)),
            "curvature": packed_lower(self.curvature(theta)),
        }


def survey(site):
    mean = site.a.mean(axis=0)
    return {
        "work": "survey",
        "rowsUsed": len(site.y),
        "rowsDropped": site.rows_dropped,
        "columns": site.names,
        "mean": vector(mean),
        "centredSquares": vector(((site.a - mean) ** 2).sum(axis=0)),
        "response": {
            "weightSum": number(site.w.sum()),
            "weightedSum": number(site.w @ site.y),
            "exposureSum": number(site.w @ np.exp(site.o)),
            "least": number(site.y.min()),
            "most": number(site.y.max()),
            "saturatedLoss": number(site.w @ site.loss.saturated(site.y)),
        },
        "folds": [],
        "allowance": {
            "leave": ["counts", "moments", "proximal", "gradients", "curvature", "sketches"],
            "curvatureMost": None,
            "numbersMost": None,
            "roundsMost": None,
        },
        "notes": [],
    }


def proximal(problem, work):
    points = []
    for asked in work["problems"]:
        if asked["part"] is not None:
            raise Refused("not-supported", "This worker has no folds.")
        if asked["diagonal"] is None or asked["start"] is None:
            raise Refused("memory-missing", "This worker keeps no vectors.")
        metric = np.diag(asked["scale"] * array(asked["diagonal"]))
        point, steps = problem.minimise(array(asked["start"]), metric, metric @ array(asked["center"]))
        points.append({"problem": asked["problem"], "point": vector(point), "newtonSteps": steps})
    return {"work": "proximal", "problems": points}


def evaluate(problem, work):
    if work["part"] is not None:
        raise Refused("not-supported", "This worker has no folds.")
    points = [evaluated(problem, array(asked["point"]), asked["want"]) for asked in work["points"]]
    return {
        "work": "evaluate",
        "problem": work["problem"],
        "points": points,
        "ownFit": None if work["ownFit"] is None else own_fit(problem, work),
        "sketch": None if work["sketch"] is None else sketch(problem, work),
    }


def evaluated(problem, theta, want):
    depth = ["value", "gradient", "diagonal", "curvature"].index(want)
    curvature = problem.curvature(theta) if depth >= 2 else None
    return {
        "value": number(problem.value(theta)),
        "gradient": vector(problem.gradient(theta)) if depth >= 1 else None,
        "diagonal": vector(np.diag(curvature)) if depth >= 2 else None,
        "curvature": packed_lower(curvature) if depth >= 3 else None,
    }


def own_fit(problem, work):
    point = array(work["points"][work["ownFit"]["at"]]["point"])
    diagonal = np.diag(problem.curvature(point))
    floor = max(1e-3 * diagonal.max(), 1e-3 * len(problem.y) / problem.total)
    metric = work["ownFit"]["hold"] * np.diag(np.maximum(diagonal, floor))
    x, _ = problem.minimise(point, metric, metric @ point)
    curvature = problem.curvature(x)
    return {"curvature": packed_lower(curvature), "linear": vector(curvature @ x - problem.gradient(x))}


def sketch(problem, work):
    asked = work["sketch"]
    point = array(work["points"][asked["at"]]["point"])
    directions = array(asked["directions"]).reshape(asked["columns"], problem.p)
    rows = problem.x @ directions.T * problem.row_curvature(point)[:, None]
    return vector((problem.x.T @ rows).T)


def joint(problem, work):
    """Proximal Newton: the model of the smooth part with the penalty, by coordinate descent."""
    bowl, linear = unpacked_lower(array(work["curvature"]), problem.p), array(work["linear"])
    l1, l2 = array(work["l1"]), array(work["l2"])
    start = array(work["start"])

    def objective(at):
        smooth = problem.value(at) + 0.5 * at @ bowl @ at - linear @ at
        return smooth + l1 @ np.abs(at) + 0.5 * l2 @ at**2

    x = start.copy()
    for steps in range(1, 101):
        gradient = problem.gradient(x) + bowl @ x - linear
        target = penalised_model(problem.curvature(x) + bowl, gradient, x, l1, l2)
        step = target - x
        if np.max(np.abs(step), initial=0) <= 1e-12 * (1 + np.max(np.abs(x), initial=0)):
            x = target
            break
        before, length = objective(x), 1.0
        while length > 1e-10 and not objective(x + length * step) <= before + 1e-14 * (1 + abs(before)):
            length /= 2
        x = x + length * step
    return {
        "work": "joint",
        "problem": work["problem"],
        "start": problem.quadratic(start),
        "point": vector(x),
        "end": problem.quadratic(x),
        "newtonSteps": steps,
    }


def penalised_model(matrix, gradient, x, l1, l2):
    """argmin over z of gradient'(z - x) + (z - x)'A(z - x)/2 + sum l1|z| + l2 z^2/2."""
    if np.any(np.diag(matrix) + l2 <= 0):
        raise Refused("not-positive-definite", "The curvature is not positive definite.")
    z, pull = x.copy(), gradient.copy()
    for _ in range(10000):
        moved = 0.0
        for j in range(len(z)):
            rest = matrix[j, j] * z[j] - pull[j]
            new = np.sign(rest) * max(abs(rest) - l1[j], 0.0) / (matrix[j, j] + l2[j])
            change = new - z[j]
            if change != 0.0:
                pull += matrix[:, j] * change
                z[j] = new
                moved = max(moved, abs(change))
        if moved <= 1e-14 * (1 + np.max(np.abs(z), initial=0)):
            break
    return z


def factor(problem, work):
    if problem.loss is not Squared or work["folds"]:
        raise Refused("not-supported", "Factors are for a squared loss, and this worker has no folds.")
    rows = np.column_stack([problem.x, problem.y - problem.o]) * np.sqrt(problem.w / problem.total)[:, None]
    size = rows.shape[1]
    r = np.zeros((size, size))
    found = np.linalg.qr(rows, mode="r")
    r[: len(found)] = found
    r *= np.where(np.diag(r) < 0, -1.0, 1.0)[:, None]
    # packed upper triangle, column by column: the lower triangle of the transpose, row by row
    return {"work": "factor", "factors": [packed_lower(r.T)]}


WORKS = {"proximal": proximal, "evaluate": evaluate, "joint": joint, "factor": factor}


# ---- the link


class Worker:
    def __init__(self, site, table, pause_seconds):
        self.site, self.table, self.pause_seconds = site, table, pause_seconds
        self.runs, self.answered = {}, {}
        self.frame_bytes_most = FRAME_BYTES_MOST

    def prepare(self, message):
        text = message["specification"]
        run = self.runs.setdefault(message["run"], {"rows": None})
        run["digest_fits"] = hashlib.sha256(text.encode()).hexdigest() == message["digest"]
        run["specification"], run["scaling"], run["problem"] = json.loads(text), message["scaling"], None

    def answer(self, ask):
        """The frame that answers an ask, or refuses it."""
        time.sleep(self.pause_seconds)
        key, content = (ask["run"], ask["ask"]), cbor2.dumps(ask, canonical=True)
        try:
            before = self.answered.get(key)
            if before is not None and before[0] != content:
                raise Refused("ask-changed", "This number came before with other content.")
            if before is not None:
                return before[1]
            work = [self.item(ask["run"], one) for one in ask["work"]]
            print(f"answered {' '.join(one['work'] for one in ask['work'])}", flush=True)
            frame = encoded({"kind": "answer", "run": ask["run"], "ask": ask["ask"], "work": work})
            if len(frame) > self.frame_bytes_most:
                raise Refused("frame-too-large", "The answer would not fit into a frame.")
            # the newest answer of a run is all that may be asked for again
            self.answered = {k: v for k, v in self.answered.items() if k[0] != ask["run"]}
            self.answered[key] = (content, frame)
            return frame
        except Refused as refused:
            code, message, remedy = refused.code, refused.message, refused.remedy
        except np.linalg.LinAlgError:
            code, message, remedy = "not-positive-definite", "A matrix is not positive definite.", None
        refusal = {"kind": "refusal", "run": ask["run"], "ask": ask["ask"]}
        return encoded({**refusal, "code": code, "message": message, "remedy": remedy})

    def item(self, name, work):
        run = self.runs.get(name)
        if run is None:
            raise Refused("run-unknown", "This run was not prepared on this link.")
        if not run["digest_fits"]:
            raise Refused("field-value", "The digest is not that of the specification.")
        specification = run["specification"]
        sites = specification["sites"]
        if isinstance(sites, list) and self.site not in sites:
            raise Refused("site-unknown", "The specification does not name this site.")
        if run["rows"] is None:
            run["rows"] = Site(specification, self.table)
        if work["work"] == "survey":
            return survey(run["rows"])
        if work["work"] not in WORKS:
            raise Refused("not-supported", f"This worker does not answer {work['work']}.")
        if run["scaling"] is None:
            raise Refused("dimension-wrong", "There is no scaling yet.")
        if run["problem"] is None:
            run["problem"] = Problem(run["rows"], run["scaling"], specification["intercept"] == "shared")
        return WORKS[work["work"]](run["problem"], work)


def encoded(message):
    return cbor2.dumps(message, canonical=True)


async def serve(url, token, worker):
    """One link, from hello to its end; the code that it was closed with."""
    headers = {"Authorization": f"Bearer {token}"}
    limits = {"max_size": FRAME_BYTES_MOST, "ping_interval": 10, "ping_timeout": 120}
    async with websockets.connect(
        f"{url}/v1/site", extra_headers=headers, subprotocols=["commonfit.v1"], compression=None, **limits
    ) as link:
        hello = {"kind": "hello", "version": 1, "site": worker.site, "shard": {"index": 1, "of": 1}}
        await link.send(encoded({**hello, "software": "interop 1", "kernel": f"numpy {np.__version__}"}))
        worker.runs = {}
        async for frame in link:
            message = cbor2.loads(frame)
            kind = message["kind"]
            if kind == "welcome":
                worker.frame_bytes_most = message["frameBytesMost"]
                print("connected", flush=True)
            elif kind == "prepare":
                worker.prepare(message)
            elif kind == "ask":
                await link.send(await asyncio.to_thread(worker.answer, message))
            elif kind == "run-end":
                worker.runs.pop(message["run"], None)
                print(f"run {message['run']} ended: {message['outcome']}", flush=True)
        return link.close_code


async def main():
    parser = argparse.ArgumentParser()
    for name in ("url", "site", "token-file", "table"):
        parser.add_argument(f"--{name}", required=True)
    parser.add_argument("--pause", type=float, default=0.0)
    options = parser.parse_args()
    worker = Worker(options.site, read_table(options.table), options.pause)
    token = pathlib.Path(options.token_file).read_text().strip()
    while True:
        try:
            code = await serve(options.url.rstrip("/"), token, worker)
        except (OSError, websockets.WebSocketException) as error:
            print(f"not connected: {error}", file=sys.stderr, flush=True)
            if getattr(error, "status_code", None) in (401, 403, 426):
                return 1
            code = None
        if code in FINAL_CLOSE_CODES:
            return 1
        await asyncio.sleep(1)


if __name__ == "__main__":
    sys.exit(asyncio.run(main()))

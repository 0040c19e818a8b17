"""Coefficients of controls: regressed on a pilot with a stream of its own, so that the main estimate stays unbiased.

Of many candidates those are taken that lower variance times cost, one after the other, each by what it adds to those
before (a Cholesky factorisation of their covariance with pivots chosen by the gain). So candidates that are nearly sums
of others have no say, and the coefficients stay small. The same controls serve every leg.
"""

from __future__ import annotations

import math
from dataclasses import dataclass, replace

import numpy as np

from mcx.estimators.plan import FEWEST_UNLIKE, unlike
from mcx.estimators.reduction.scheme import Case, Control, Draft, Inapplicable, Scheme
from mcx.machine.run import Stream, values_by_path
from mcx.machine.sizes import cost, op_costs
from mcx.tape.builder import Builder
from mcx.tape.ops import Op
from mcx.tape.passes import drop_dead_code
from mcx.tape.program import Tape

PILOT_PATHS, LARGEST_PILOT = 1 << 13, 1 << 18
PATHS_EACH = 40  # of the pilot for each candidate
MOST_NAMED = 6
MOST_CONTROLS = 48  # chosen; those that must take part come on top
EXACT = 1e-24  # of the variance: nothing is left but rounding
PATIENCE = 12  # controls beyond the best number so far
INDEPENDENT = 1e-9  # of a candidate's variance must be its own
NARROW = 1e-12  # of the widest direction's variance: a direction narrower than that has no say
MULTIPLY_AND_SUBTRACT = 0.34  # ns a path and output: see `machine/sizes.py`
CONTROLLED = ("price", "leg", "part")


def fitted(case: Case, names: tuple[str, ...], draft: Draft) -> Scheme:
    """The scheme of a draft, its controls fitted. Raises Inapplicable where no control helps, or too few paths of the
    pilot say anything about the coefficients."""
    outputs = case.ready.unrolled.tape.outputs
    if not draft.controls:
        return Scheme(names, case.ready.lowered(draft.tape), each=draft.each, notes=draft.notes)
    wanted = [number for number, output in enumerate(outputs) if output.kind in CONTROLLED]
    piloted = (*wanted, *range(len(outputs), len(draft.tape.outputs)))
    tape = replace(draft.tape, outputs=tuple(draft.tape.outputs[k] for k in piloted))
    values = _pilot(case, tape, len(draft.controls))
    paths = values.shape[1] * draft.each
    targets, candidates = values[: len(wanted)].T, values[len(wanted) :].T
    plain = cost(case.ready.lowered(_without_controls(draft.tape, len(outputs))))
    costs = Costs(plain, MULTIPLY_AND_SUBTRACT * len({draft.tape.outputs[k].value for k in wanted}),
                  *_own_work(draft.tape, len(outputs)))
    chosen = chosen_controls(targets[:, 0], candidates, draft.controls, costs)
    if not len(chosen) and not any(control.asked for control in draft.controls):  # the methods do without
        whole = _without_controls(draft.tape, len(outputs))
        return Scheme(names, case.ready.lowered(whole), each=draft.each, fit_paths=paths, notes=draft.notes)
    if not len(chosen):
        raise Inapplicable("no control lowers variance times cost")
    betas = coefficients(targets, candidates[:, chosen])
    taken = [draft.controls[k] for k in chosen]
    whole = controlled(draft.tape, len(outputs), wanted, chosen, taken, betas)
    notes = (*draft.notes, _listed([control.name for control in taken]))
    return Scheme(names, case.ready.lowered(whole), each=draft.each, fit_paths=paths, notes=notes)


def _listed(names: list[str]) -> str:
    more = f" and {len(names) - MOST_NAMED} more" if len(names) > MOST_NAMED else ""
    return f"{len(names)} control{'s' * (len(names) > 1)}: {', '.join(names[:MOST_NAMED])}{more}"


def _without_controls(tape: Tape, outputs: int) -> Tape:
    return drop_dead_code(replace(tape, outputs=tape.outputs[:outputs]))


def _pilot(case: Case, tape: Tape, controls: int) -> np.ndarray:
    """Every output on each path of the pilot, enlarged until enough paths differ in price; (outputs, paths). Raises
    Inapplicable where they do not, or that costs more than `case.most`."""
    program = case.ready.lowered(drop_dead_code(tape))
    each = cost(program) if case.most < math.inf else 0.0
    paths, drawn = PILOT_PATHS, 0
    while paths < PATHS_EACH * controls:
        paths *= 2
    while True:
        drawn += paths
        if drawn * each > case.most:
            raise Inapplicable(f"a pilot of {paths:,} paths costs too much for this run")
        values = values_by_path(program, seed=case.seed, paths=paths, stream=Stream.COEFFICIENTS, threads=case.threads)
        differ = unlike(values[0])
        if differ >= FEWEST_UNLIKE:
            return values
        if paths >= LARGEST_PILOT:
            raise Inapplicable(f"of {paths:,} pilot paths only {differ} differ in price from the rest: too few to find "
                               f"the coefficients of controls from")
        paths = min(4 * paths, LARGEST_PILOT)


@dataclass(frozen=True, slots=True)
class Costs:
    """What paths cost, in the nanoseconds of `machine/sizes.py`: `plain` without controls, `each` for taking one off.

    work (instructions,): of each instruction that only controls need; needs (controls, instructions): who needs which.
    """

    plain: float
    each: float
    work: np.ndarray
    needs: np.ndarray


def _own_work(tape: Tape, outputs: int) -> tuple[np.ndarray, np.ndarray]:
    """`work` and `needs` of a tape whose first outputs are the contract's."""
    shared = _needed(tape, [output.value for output in tape.outputs[:outputs]])
    alone = [_needed(tape, [output.value]) for output in tape.outputs[outputs:]]
    needs = np.array(alone) & ~np.array(shared)
    used = needs.any(axis=0)
    return op_costs(tape)[used], needs[:, used]


def _needed(tape: Tape, values: list[int]) -> np.ndarray:
    needed = np.zeros(len(tape.instructions), dtype=bool)
    waiting = list(values)
    while waiting:
        value = waiting.pop()
        if not needed[value]:
            needed[value] = True
            waiting += tape.instructions[value].operands
    return needed


def chosen_controls(target: np.ndarray, candidates: np.ndarray, controls: tuple[Control, ...],
                    costs: Costs) -> np.ndarray:
    """The numbers of the candidates to take: those that must, and of the others the first so many, each the one that
    then makes variance times cost least, up to where it is least of all.

    target (paths,), candidates (paths, controls).
    """
    paths = len(target)
    centred = candidates - candidates.mean(axis=0)
    scale = np.sqrt(np.einsum("pk,pk->k", centred, centred) / paths)
    usable = np.isfinite(scale) & (scale > 1e-14)
    centred = np.where(usable, centred, 0.0) / np.where(usable, scale, 1.0)
    covariance = centred.T @ centred / paths
    along = centred.T @ (target - target.mean()) / paths
    left = np.where(usable, 1.0, 0.0)
    variance = whole = float(target.var())
    must = np.array([control.must for control in controls]) & usable
    most = int(must.sum()) + MOST_CONTROLS
    factor = np.zeros((len(covariance), most))
    open_work, needs = costs.work.copy(), costs.needs.astype(np.float64)
    spent, taken = costs.plain, []
    best, least = 0, np.inf if must.any() else variance * spent
    while len(taken) < min(most, int(must.sum()) + best + PATIENCE) and variance > EXACT * whole:
        usable[taken] = False
        usable &= left > INDEPENDENT
        if not usable.any():
            break
        gains = np.where(usable, along**2 / np.where(usable, left, 1.0), 0.0)
        price = spent + costs.each + needs @ open_work
        burdens = np.where(usable, np.maximum(variance - gains, 0.0) * price, np.inf)
        pressing = must & usable
        pivot = int(np.argmin(np.where(pressing, burdens, np.inf) if pressing.any() else burdens))
        root = np.sqrt(left[pivot])
        column = (covariance[:, pivot] - factor @ factor[pivot]) / root
        variance -= float(gains[pivot])
        along = along - column * (along[pivot] / root)
        left = left - column**2
        factor[:, len(taken)] = column
        taken.append(pivot)
        spent = float(price[pivot])
        open_work[costs.needs[pivot]] = 0.0
        burden = max(variance, 0.0) * (1.0 + 2.0 * len(taken) / paths) * spent
        if burden < least and not (must & usable)[[k for k in range(len(must)) if k not in taken]].any():
            best, least = len(taken), burden
    return np.array(sorted(taken[:best]), dtype=int)


def coefficients(targets: np.ndarray, controls: np.ndarray) -> np.ndarray:
    """What to multiply each control with for each target, (controls, targets), by least squares; directions in which
    the controls hardly vary have no say.

    By the covariances, twice: what rounding leaves of the first solution is solved for again.
    """
    centred = controls - controls.mean(axis=0)
    scale = np.sqrt(np.einsum("pk,pk->k", centred, centred))
    centred /= scale
    sizes, directions = np.linalg.eigh(centred.T @ centred)
    kept = sizes > NARROW * sizes[-1]
    inverse = (directions[:, kept] / sizes[kept]) @ directions[:, kept].T
    wanted = targets - targets.mean(axis=0)
    solved = inverse @ (centred.T @ wanted)
    solved += inverse @ (centred.T @ (wanted - centred @ solved))
    return solved / scale[:, None]


def controlled(tape: Tape, outputs: int, wanted: list[int], chosen: np.ndarray, taken: list[Control],
               betas: np.ndarray) -> Tape:
    """The tape with its price, legs and parts less their coefficients times the controls' distances from their means;
    the price stays the sum of its legs."""
    builder = Builder.of(tape)
    made = {number: output.value for number, output in enumerate(tape.outputs[:outputs])}
    known: dict[int, int] = {}
    for target, number in enumerate(wanted):
        value = tape.outputs[number].value
        if tape.outputs[number].kind != "price":
            if value not in known:
                known[value] = _less(builder, tape, outputs, value, chosen, taken, betas[:, target])
            made[number] = known[value]
    legs = [made[number] for number in wanted if tape.outputs[number].kind == "leg"]
    made[0] = builder.fold(Op.ADD, legs)
    results = [replace(tape.outputs[number], value=value) for number, value in sorted(made.items())]
    return drop_dead_code(builder.tape(results, tape.normals, tape.uniforms))


def _less(builder: Builder, tape: Tape, outputs: int, value: int, chosen: np.ndarray, taken: list[Control],
          betas: np.ndarray) -> int:
    for k, control, beta in zip(chosen, taken, betas.tolist(), strict=True):
        part = builder.emit(Op.MUL, tape.outputs[outputs + int(k)].value, builder.constant(beta))
        value = builder.emit(Op.SUB, value, part)
    known = sum(beta * control.mean for beta, control in zip(betas.tolist(), taken, strict=True))
    return builder.emit(Op.ADD, value, builder.constant(known))

"""Both field directions and both sweep directions of one temperature, laid over each other.

rho_xx is even in the field and rho_xy odd, but contacts out of line mix them, a magnet has remanence, and
the recorded field runs ahead of the true one. The shift between two traces, and the leak of one resistivity
into the other, are fitted together to the difference of the traces; then the directions are joined.
"""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import dataclass, replace
from typing import Literal

import numpy as np
from numpy.typing import NDArray
from scipy.signal import savgol_filter

from gapfit.errors import InputError
from gapfit.smoothing import interpolated
from gapfit.traces import Alignment, Sweep, TraceFamily

__all__ = ["folded", "symmetrise"]

FloatArray = NDArray[np.float64]
GRID = 3000
SMOOTH = 11
ROUNDS = 3
NOTABLE = 3.0
"""A leak or shift is worth a notice beyond this multiple of its standard error."""


def symmetrise(family: TraceFamily, mode: Literal["auto", "never", "always"] = "auto") -> TraceFamily:
    """Sweeps aligned and, where both field directions exist, joined: rho_xx even, rho_xy odd.

    Parameters
    ----------
    family : TraceFamily
        Sweeps as loaded.
    mode : {"auto", "never", "always"}
        ``"auto"`` joins where both directions are present; ``"always"`` demands them; ``"never"`` only
        turns negative fields round.

    Returns
    -------
    TraceFamily
        Fields are absolute values, corrected for remanence and lag. Up and down sweeps stay apart.

    Raises
    ------
    InputError
        If the mode is unknown, or demands a field direction that is not there.
    """
    if mode not in ("auto", "never", "always"):
        raise InputError(f"symmetrise = {mode!r} is unknown; allowed are auto, never, always")
    turned = [folded(sweep) for sweep in family.sweeps]
    if mode == "never":
        return replace(family, sweeps=tuple(turned)).noted(*_unjoined_notice(turned, family))
    sweeps: list[Sweep] = []
    alignments: list[Alignment] = []
    for group in dict.fromkeys(sweep.group for sweep in turned):
        members = [sweep for sweep in turned if sweep.group == group]
        joined, alignment = _joined_group(members)
        sweeps += joined
        alignments += [alignment] if alignment is not None else []
    lonely = [sweep for sweep in sweeps if sweep.field_sign != 0]
    if mode == "always" and lonely:
        raise InputError(
            f"symmetrise = 'always', but {lonely[0].label} has no partner of the other field direction; "
            "measure it, or set symmetrise = 'auto'"
        )
    notices = _alignment_notices(alignments, family) + _unjoined_notice(lonely, family)
    done = replace(family, sweeps=tuple(sweeps), alignments=tuple(alignments))
    return done.noted(*notices)


def folded(sweep: Sweep) -> Sweep:
    """The sweep on the absolute value of its field, in rising order; rho_xy changes sign with the field."""
    if sweep.field_sign >= 0:
        return sweep
    order = slice(None, None, -1) if sweep.kind == "field" else slice(None)
    turned = {name: getattr(sweep, name)[order] for name in ("row", "temperature_K", "signal", "one_sided")}
    turned |= {name: getattr(sweep, name)[order] for name in ("gate_V", "density_per_m2")}
    segment = sweep.segment[order]
    return replace(
        sweep,
        **turned,
        field_T=np.abs(sweep.field_T[order]),
        segment=np.abs(segment - segment[0]),
        rho_xy_ohm=None if sweep.rho_xy_ohm is None else -sweep.rho_xy_ohm[order],
        quadrature=None if sweep.quadrature is None else sweep.quadrature[order],
    )


@dataclass(frozen=True, eq=False)
class _Difference:
    """Shift between two traces, and the leaks, from their difference."""

    shift: float
    shift_error: float
    hall_into_xx: float
    hall_into_xx_error: float
    xx_into_hall: float
    xx_into_hall_error: float
    remaining: float


def _on_grid(sweep: Sweep, shift: float, grid: FloatArray) -> tuple[FloatArray, FloatArray | None]:
    position = sweep.abscissa + shift
    along = interpolated(grid, position, sweep.signal, sweep.segment)
    if sweep.rho_xy_ohm is None:
        return along, None
    return along, interpolated(grid, position, sweep.rho_xy_ohm, sweep.segment)


def _overlap(one: Sweep, two: Sweep) -> FloatArray:
    low = max(one.abscissa[0], two.abscissa[0])
    high = min(one.abscissa[-1], two.abscissa[-1])
    margin = 0.005 * (high - low)
    size = min(GRID, max(one.n_point, two.n_point))
    return np.linspace(low + margin, high - margin, size) if high > low else np.array([])


def _difference(one: Sweep, two: Sweep, opposite: bool) -> _Difference | None:
    """Fit the difference of two traces: a shift and, for opposite field directions, the two leaks."""
    grid = _overlap(one, two)
    if grid.size < 10 * SMOOTH:
        return None
    shift = 0.0
    found = None
    for _ in range(ROUNDS):
        first, second = _on_grid(one, shift / 2, grid), _on_grid(two, -shift / 2, grid)
        found = _fit_difference(grid, first, second, opposite)
        if found is None:
            return None
        shift += found.shift
    return None if found is None else replace(found, shift=shift)


def _fit_difference(
    grid: FloatArray,
    first: tuple[FloatArray, FloatArray | None],
    second: tuple[FloatArray, FloatArray | None],
    opposite: bool,
) -> _Difference | None:
    """One Gauss-Newton step for shift and leaks.

    With one(x) = f(x + a) and two(x) = f(x + b) the difference is (a - b) df/dx; a shift of +x of `one`
    undoes it with the same sign, since a true position is the recorded one plus a.
    """
    step = grid[1] - grid[0]
    along = (first[0] + second[0]) / 2
    blocks = [(first[0] - second[0], along)]
    across = None
    if first[1] is not None and second[1] is not None:
        across = (first[1] + second[1]) / 2
        blocks.append((first[1] - second[1], across))
    rows, targets = [], []
    for number, (difference, curve) in enumerate(blocks):
        design = np.zeros((grid.size, 5))
        design[:, 0] = savgol_filter(curve, SMOOTH, 2, deriv=1, delta=step)
        if opposite:
            stand_in = grid if across is None else across
            design[:, 1 + number] = 2 * (stand_in if number == 0 else along)
            design[:, 3 + number] = 1.0 if number or across is None else 0.0
        keep = np.isfinite(design).all(axis=1) & np.isfinite(difference)
        rows.append(design[keep])
        targets.append(difference[keep])
    return _solve(rows, targets, opposite, across is not None)


def _solve(
    rows: Sequence[FloatArray], targets: Sequence[FloatArray], opposite: bool, hall: bool
) -> _Difference | None:
    """Least squares of the blocks, each weighted by its own residual, twice."""
    scales = [float(np.std(target)) or 1.0 for target in targets]
    answer = np.zeros(5)
    if sum(target.size for target in targets) < 10 * SMOOTH:
        return None
    for _ in range(3):
        design = np.concatenate([row / scale for row, scale in zip(rows, scales, strict=True)])
        target = np.concatenate([block / scale for block, scale in zip(targets, scales, strict=True)])
        size = np.sqrt(np.sum(design**2, axis=0))
        used = size > 0
        answer = np.zeros(5)
        answer[used] = np.linalg.lstsq(design[:, used] / size[used], target, rcond=1e-10)[0] / size[used]
        residuals = [block - row @ answer for row, block in zip(rows, targets, strict=True)]
        scales = [
            float(np.std(residual)) or 1e-12 * (float(np.std(block)) or 1.0)
            for residual, block in zip(residuals, targets, strict=True)
        ]
    scaled = design[:, used] / size[used]
    inverse = np.diag(np.linalg.pinv(scaled.T @ scaled)) / size[used] ** 2
    errors = np.full(5, np.nan)
    errors[used] = np.sqrt(inverse * max(_independent_every(residuals[-1]), 1.0))
    noise = float(np.std(np.diff(residuals[0]))) / np.sqrt(2) or 1e-300
    return _Difference(
        shift=float(answer[0]),
        shift_error=float(errors[0]),
        hall_into_xx=float(answer[1]) if opposite and hall else float("nan"),
        hall_into_xx_error=float(errors[1]) if opposite and hall else float("nan"),
        xx_into_hall=float(answer[2]) if opposite and hall else float("nan"),
        xx_into_hall_error=float(errors[2]) if opposite and hall else float("nan"),
        remaining=float(np.std(residuals[0])) / noise,
    )


def _independent_every(residual: FloatArray) -> float:
    """Samples per independent one, from the correlation of residuals summed up to its first zero."""
    centred = residual - residual.mean()
    size = 2 * centred.size
    spectrum = np.abs(np.fft.rfft(centred, size)) ** 2
    correlation = np.fft.irfft(spectrum, size)[: centred.size]
    if not correlation[0] > 0:
        return 1.0
    correlation /= correlation[0]
    stop = int(np.argmax(correlation < 0)) or correlation.size
    return float(2 * np.sum(correlation[:stop]) - 1)


def _pairs(members: Sequence[Sweep]) -> list[tuple[int, int]]:
    """Sweeps of opposite field direction that belong together, those of one sweep direction first."""
    plus = [index for index, sweep in enumerate(members) if sweep.field_sign > 0]
    minus = [index for index, sweep in enumerate(members) if sweep.field_sign < 0]
    found = []
    for same in (True, False):
        for one in list(plus):
            for two in list(minus):
                agree = members[one].direction == members[two].direction
                if one in plus and two in minus and agree == same:
                    found.append((one, two))
                    plus.remove(one)
                    minus.remove(two)
    return found


def _joined_group(members: Sequence[Sweep]) -> tuple[list[Sweep], Alignment | None]:
    """Aligned and joined sweeps of one group, and what was found."""
    if len(members) == 1:
        return [members[0]], None
    pairs = _pairs(members)
    twins = [
        (i, j)
        for i, one in enumerate(members)
        for j, two in enumerate(members)
        if i < j and one.field_sign == two.field_sign
    ]
    measured = {pair: _difference(members[pair[0]], members[pair[1]], True) for pair in pairs}
    measured |= {pair: _difference(members[pair[0]], members[pair[1]], False) for pair in twins}
    known = {pair: found for pair, found in measured.items() if found is not None}
    if not known:
        return list(members), None
    moves, offsets = _offsets(members, known)
    alignment = _alignment(members, offsets, [known[pair] for pair in pairs if pair in known])
    shifted = [_shifted(sweep, moves) for sweep in members]
    paired = {index for pair in pairs for index in pair}
    joined = [_join(shifted[i], shifted[j], alignment.hall_into_xx) for i, j in pairs]
    return joined + [sweep for index, sweep in enumerate(shifted) if index not in paired], alignment


def _signs(sweep: Sweep) -> FloatArray:
    """Effect of offset and lag on the absolute abscissa of a sweep."""
    turn = sweep.field_sign if sweep.kind == "field" else 1
    pace = 1 if sweep.direction == "up" else -1
    return np.array([turn if sweep.kind == "field" else 0, turn * pace], dtype=float)


def _offsets(
    members: Sequence[Sweep], known: dict[tuple[int, int], _Difference]
) -> tuple[FloatArray, FloatArray]:
    """Offset and lag from the shifts of all pairs.

    Returns
    -------
    moves : ndarray[2]
        Offset and lag to apply; the smallest ones where the pairs leave a choice.
    report : ndarray[2, 2]
        Offset and lag, and their errors, NaN where the pairs do not tell. Where only their sum is known it
        stands as the offset.
    """
    rows = np.array([_signs(members[i]) - _signs(members[j]) for i, j in known])
    shifts = np.array([found.shift for found in known.values()])
    errors = np.maximum([found.shift_error for found in known.values()], 1e-15)
    inverse = np.linalg.pinv(rows / errors[:, None], rcond=1e-8)
    moves = inverse @ (shifts / errors)
    sigma = np.sqrt(np.sum(inverse**2, axis=1))
    if np.linalg.matrix_rank(rows) < 2:
        both = bool(rows[0].all())
        sum_of_both = float(np.sign(rows[0, 0]) * np.sign(rows[0]) @ moves)
        answer = [sum_of_both if both else moves[0], np.nan if both else moves[1]]
        spread = [sigma.sum() if both else sigma[0], sigma[1]]
        seen = rows.any(axis=0) & np.array([True, not both])
        return moves, np.where(seen, [answer, spread], np.nan)
    return moves, np.array([moves, sigma])


def _alignment(members: Sequence[Sweep], offsets: FloatArray, leaks: Sequence[_Difference]) -> Alignment:
    """Record of one group; the leaks are means over its pairs of field directions."""

    def mean(name: str) -> tuple[float, float]:
        values = np.array([getattr(leak, name) for leak in leaks])
        errors = np.array([getattr(leak, f"{name}_error") for leak in leaks])
        known = np.isfinite(values)
        if not known.any():
            return float("nan"), float("nan")
        spread = float(np.std(values[known])) / np.sqrt(known.sum())
        return float(values[known].mean()), float(
            np.hypot(np.sqrt(np.sum(errors[known] ** 2)) / known.sum(), spread)
        )

    return Alignment(
        members[0].group,
        float(np.mean([sweep.mean_temperature for sweep in members])),
        *(float(offsets[0, 0]), float(offsets[1, 0]), float(offsets[0, 1]), float(offsets[1, 1])),
        *mean("hall_into_xx"),
        *mean("xx_into_hall"),
        max((leak.remaining for leak in leaks), default=float("nan")),
    )


def _shifted(sweep: Sweep, moves: FloatArray) -> Sweep:
    name = {"field": "field_T", "gate": "gate_V", "density": "density_per_m2"}[sweep.kind]
    return replace(sweep, **{name: getattr(sweep, name) + float(_signs(sweep) @ moves)})


def _join(plus: Sweep, minus: Sweep, leak: float) -> Sweep:
    """Even part of rho_xx and odd part of rho_xy, on the points of the denser sweep.

    Where only one of the two sweeps reaches, its rho_xx less the leak of rho_xy is kept and marked; both are
    needed for that.
    """
    base, other = (plus, minus) if plus.n_point >= minus.n_point else (minus, plus)
    sign = 1.0 if base is plus else -1.0
    at = base.abscissa

    def partner(values: FloatArray) -> FloatArray:
        return interpolated(at, other.abscissa, values, other.segment)

    signal = (base.signal + partner(other.signal)) / 2
    alone = np.isnan(signal)
    hall = None
    if base.rho_xy_ohm is not None and other.rho_xy_ohm is not None:
        hall = (base.rho_xy_ohm + partner(other.rho_xy_ohm)) / 2
        hall = np.where(alone, base.rho_xy_ohm, hall)
        signal = np.where(alone, base.signal - sign * leak * base.rho_xy_ohm, signal)
    temperature = (base.temperature_K + partner(other.temperature_K)) / 2
    quadrature = None
    if base.quadrature is not None and other.quadrature is not None:
        quadrature = (base.quadrature + partner(other.quadrature)) / 2
        quadrature = np.where(alone, base.quadrature, quadrature)
    keep = np.isfinite(signal)
    files = " + ".join(dict.fromkeys((plus.file, minus.file)))
    return replace(
        base,
        file=files,
        row=base.row[keep],
        field_T=base.field_T[keep],
        gate_V=base.gate_V[keep],
        density_per_m2=base.density_per_m2[keep],
        temperature_K=np.where(alone, base.temperature_K, temperature)[keep],
        signal=signal[keep],
        rho_xy_ohm=None if hall is None else hall[keep],
        quadrature=None if quadrature is None else quadrature[keep],
        direction=plus.direction,
        field_sign=0,
        step=base.step / 2,
        segment=base.segment[keep],
        one_sided=alone[keep],
    )


def _alignment_notices(alignments: Sequence[Alignment], family: TraceFamily) -> tuple[str, ...]:
    """Sentences on leaks and shifts, one for all temperatures."""
    unit = {"field": "T", "gate": "V", "density": "m^-2"}[family.kind]
    texts = (
        ("hall_into_xx", "rho_xy in the measured rho_xx was {:.3g} of it (removed by symmetrising)", 1.0),
        ("xx_into_hall", "rho_xx in the measured rho_xy was {:.3g} of it (removed by symmetrising)", 1.0),
        ("remanence", "the true abscissa is the recorded one plus {:.3g} " + unit + " (corrected)", 1.0),
        ("lag", "rising and falling sweeps lie {:.3g} " + unit + " apart (corrected)", -2.0),
    )
    notices = []
    for name, text, factor in texts:
        values = np.array([getattr(alignment, name) for alignment in alignments], dtype=float)
        errors = np.array([getattr(alignment, f"{name}_error") for alignment in alignments], dtype=float)
        known = np.isfinite(values) & np.isfinite(errors)
        if not known.any():
            continue
        middle = float(np.median(values[known]))
        if abs(middle) > NOTABLE * float(np.median(errors[known])) / np.sqrt(known.sum()):
            spread = f"; from {values[known].min():.3g} to {values[known].max():.3g} over the temperatures"
            notices.append(
                text.format(factor * middle) + (spread if known.sum() > 1 and factor == 1.0 else "")
            )
    unlike = [alignment for alignment in alignments if alignment.remaining > 2 * NOTABLE]
    if unlike:
        notices.append(
            "the two field directions still differ after alignment, beyond noise, at "
            f"{', '.join(f'{a.temperature_K:.3g}' for a in unlike)} K; their mean is used"
        )
    return tuple(notices)


def _unjoined_notice(lonely: Sequence[Sweep], family: TraceFamily) -> tuple[str, ...]:
    if not lonely:
        return ()
    if len(lonely) == len(family.sweeps):
        return ("one field direction only: a leak of rho_xy into rho_xx stays in the readings",)
    names = ", ".join(dict.fromkeys(sweep.file for sweep in lonely))
    return (f"no partner of the other field direction for sweeps of {names}; a leak of rho_xy stays in them",)

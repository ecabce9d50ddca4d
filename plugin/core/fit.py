"""Fits a plate to one transect: thickness and break by their posterior, end forces and regional inside it."""

from __future__ import annotations

import functools
from collections.abc import Callable
from dataclasses import replace

import numpy as np

from .bend import bend_problem
from .choices import moving_choices, try_choices
from .elastic import flexural_parameter
from .errors import DownwarpError
from .forward import TransectModel
from .load_shape import forward_model
from .one_thread import one_thread
from .posterior import DECISIVE, Comparison, Model, Posterior, Surface, compare, thickness_posterior
from .problem import Observations, Problem, prepare
from .profile import Profile
from .result import ChoiceRow, Estimate, Fit, FitResult, MisfitRow, Parameter, ZonesFit
from .settings import (
    BOTH,
    BROKEN,
    CONTINUOUS,
    FITTED,
    GIVEN,
    LOAD_RELIEF,
    MAPPED,
    MEASURED,
    FitOptions,
)
from .uniform import UniformBreak, is_uniform
from .wording import say
from .zones import ZoneSearch, search_zones

LEVEL_ROUNDS = 4
"""Fits after which the reference level is left as it is."""
LEAST_SIGMA = 1e-3
"""Median standard deviation, m, below which it is rounding rather than a measure of error."""
LEVEL_SETTLED = 2.0
"""Change of the reference level, m, that no longer matters."""

CORRELATION_LENGTH = "residual_correlation_length"
REGIONAL_NAMES = ("level", "tilt", "bow")
ZONE_CHANGES = (10e3, 150e3)
"""Distances from the break, m, between which a change of thickness is sought where the user gives none: published ones
lie 20 to 95 km from a trench's axis (Zhang, Lin & Zhou, abstract alone)."""
MOST_ZONE_STATIONS = 750
"""Stations beyond which trials of two zones would take more than some 1.5 GB of memory."""
KIND_WORDS = (
    (say("a continuous plate"), say("a broken plate")),
    (say("A continuous plate"), say("A broken plate")),
)
"""The kinds of plate within a sentence, and where one begins."""
ZONE_PART = 0.5
"""Part of the fitted plate within which it is sought then, at most."""

Progress = Callable[[float], None]


@one_thread()
def fit_profile(
    profile: Profile, options: FitOptions, progress: Progress | None = None, with_choices: bool = True
) -> FitResult:
    """Fit a plate, or both kinds, to a sampled profile.

    ``with_choices``: whether the fit is repeated under each reasonable alternative, which takes some ten fits more.
    Raises DownwarpError where nothing can be fitted, and whatever ``progress`` raises. Linear algebra runs on one thread,
    so that the same profile gives the same bits in any process.
    """
    told = progress if progress is not None else _silent
    tell = functools.partial(_share, told, 0.0, 0.3 if with_choices else 1.0)
    problem = prepare(profile, options)
    tried: list[tuple[float, float]] = []
    for part in range(LEVEL_ROUNDS):
        fits, comparison = _fit_kinds(problem, functools.partial(_share, tell, part / LEVEL_ROUNDS, 1 / LEVEL_ROUNDS))
        best = fits[0]
        level = _fitted_level(problem, best)
        if level is None or abs(level - (problem.reference_level or 0.0)) < LEVEL_SETTLED:
            break
        tried.append((problem.reference_level or 0.0, level))
        if part + 1 < LEVEL_ROUNDS:
            asked = replace(options, reference_level=_next_level(tried))
            problem = replace(prepare(profile, asked), options=options, reference_origin=FITTED)
    choices: tuple[ChoiceRow, ...] = ()
    if with_choices:
        choices = try_choices(problem, best, fit_kind, functools.partial(_share, told, 0.3, 0.7))
    told(1.0)
    remarks = list(problem.remarks) + list(best.remarks) + list(best.bent.remarks)
    parameters = parameters_in_use(problem, best)
    if comparison is not None:
        remarks.append(comparison.remark)
        parameters += (Parameter("log_odds_of_continuous_plate", comparison.log_odds, "1", FITTED),)
    remarks += _bend_left_to_noise(best) + moving_choices(choices, best) + _strip_checked(problem, best)
    return FitResult(best, parameters, tuple(fits), choices, tuple(dict.fromkeys(remarks)))


def _next_level(tried: list[tuple[float, float]]) -> float:
    """The reference level to try next, m up, from levels tried and those that the fit then found.

    Where the two would meet on the straight line through the last two pairs; the level found itself the first time, and
    where the line runs too nearly along the diagonal to tell.
    """
    level, found = tried[-1]
    if len(tried) > 1 and level != tried[-2][0]:
        slope = (found - tried[-2][1]) / (level - tried[-2][0])
        if slope < 0.8:
            return level + (found - level) / (1.0 - slope)
    return found


def _bend_left_to_noise(fit: Fit) -> tuple[str, ...]:
    """A remark where residuals are as long as the plate's own bend and not small beside its bulge."""
    bulge = fit.bent.markers.bulge
    length = next(row.value for row in fit.noise if row.name == CORRELATION_LENGTH) or 0.0
    problem = fit.bent.problem
    stiffness = (problem.densities.mantle - problem.densities.infill) * problem.options.elastic.gravity
    alpha = float(flexural_parameter(problem.options.elastic.rigidity(fit.bent.thickness), stiffness))
    if fit.thickness.value is None or bulge is None or length * 1e3 < alpha or fit.rms < 0.5 * abs(bulge.deflection):
        return ()
    return (
        say(
            "the fit leaves residuals of {rms:.0f} m, as long as the plate's own bend, beside a bulge of {bulge:.0f} "
            "m: it follows the part next to the break alone; begin the fit farther out (FIT_FROM)",
            rms=fit.rms,
            bulge=abs(bulge.deflection),
        ),
    )


def _fit_kinds(problem: Problem, tell: Progress) -> tuple[list[Fit], Comparison | None]:
    """Fits of the kinds of plate asked for, the better first, and how they compare where both were."""
    kind = problem.options.chosen("plate")[0]
    if kind != BOTH:
        return [fit_kind(problem, kind, tell)], None
    fits, posteriors = [], []
    for place, each in enumerate((CONTINUOUS, BROKEN)):
        fit, posterior = _fit_with_posterior(problem, each, functools.partial(_share, tell, 0.5 * place, 0.5))
        fits.append(fit)
        posteriors.append(posterior)
    comparison = compare(posteriors[0], posteriors[1], *KIND_WORDS)
    return (fits if comparison.log_odds >= 0 else fits[::-1]), comparison


def _strip_checked(problem: Problem, fit: Fit) -> tuple[str, ...]:
    """What a fit with a strip must say of it, where a load bends a continuous plate whose thickness is resolved and the
    relief about the line is known."""
    options, plan, thickness = problem.options, problem.profile.plan, fit.thickness
    if not options.check_strip or options.load_shape == MAPPED or plan is None:
        return ()
    if fit.kind != CONTINUOUS or thickness.value is None or not problem.load.any():
        return ()
    # Here, as in `load_shape`.
    from .strip_check import check_strip, strip_remarks

    try:
        # Of what a plan view has no place for, the infill matters little to the shape of the load.
        options = replace(
            options, reference_level=problem.reference_level, rho_under_load=None, fill_sinking_only=False
        )
        checked = check_strip(problem.profile, plan, options, thickness.value)
    except DownwarpError as error:
        return (say("the strip was not checked: {why}", why=error.message),)
    return strip_remarks(checked, thickness.low, thickness.high)


def _fitted_level(problem: Problem, fit: Fit) -> float | None:
    """Regional level, m up, at the middle of the load, where it says better than the relief outside the load from where
    on relief is load: the moat is part of that relief. None where the user gave the level, or none is needed."""
    if problem.reference_origin == GIVEN or not problem.bare or not problem.under_load.any():
        return None
    if problem.options.chosen("load")[0] != LOAD_RELIEF or not fit.bent.regional[0]:
        return None
    middle = float(np.average(problem.profile.distance, weights=np.abs(problem.load)))
    return sum(c * middle**power for power, c in enumerate(fit.bent.regional))


def _silent(fraction: float) -> None:
    return None


def _share(tell: Progress, start: float, part: float, fraction: float) -> None:
    tell(start + part * fraction)


def fit_kind(problem: Problem, kind: int, progress: Progress = _silent) -> Fit:
    """Fit one kind of plate to a prepared problem."""
    return _fit_with_posterior(problem, kind, progress)[0]


def _fit_with_posterior(problem: Problem, kind: int, progress: Progress) -> tuple[Fit, Posterior]:
    options = problem.options
    model, told = forward_model(problem, kind)
    seen = problem.observations()
    if seen.distance.size == 0:
        raise DownwarpError(
            "{transect}: nothing is left to fit; outside the load, beyond the break and within FIT_FROM and FIT_TO "
            "there is no observed station and no pick.",
            transect=problem.profile.name,
        )
    stations = problem.profile.distance
    positions = np.concatenate([stations, seen.distance])
    fitted = np.arange(positions.size) >= stations.size
    observed = np.concatenate([np.full(stations.size, np.nan), seen.elevation])
    sigma = complete_sigma(seen.sigma)
    if sigma is not None:
        sigma = np.concatenate([np.full(stations.size, np.nan), sigma])
    searched = problem.breaks.size > 1 and (kind == BROKEN or bool(model.end_forces))

    uniform = UniformBreak(model, positions) if searched and is_uniform(model) else None

    def evaluate(thicknesses: np.ndarray, break_position: float | None) -> tuple[np.ndarray, np.ndarray]:
        at = float(problem.breaks[0]) if break_position is None else break_position
        if uniform is not None:
            return uniform.columns(thicknesses, at)
        return trial_columns(model, thicknesses, at, positions, seen)

    def infer(trials: Model, places: np.ndarray | None, tell: Progress) -> Posterior:
        reached = 0.0

        def reach(fraction: float) -> None:
            nonlocal reached
            reached = fraction
            tell(fraction)

        def looked_at(thicknesses: np.ndarray, place: float | None) -> tuple[np.ndarray, np.ndarray]:
            # A search can be stopped before each of its trials, of which some take long.
            tell(reached)
            return trials(thicknesses, place)

        return thickness_posterior(
            observed,
            positions,
            looked_at,
            model.regional,
            options.te_from,
            options.te_to,
            fitted=fitted,
            sigma=sigma,
            known_error=options.sigma or 0.0,
            resolution=problem.profile.resolution,
            confidence=options.confidence,
            breaks=places,
            robust=options.robust,
            progress=reach,
        )

    def evaluate_zones(zoned: TransectModel, thicknesses: np.ndarray) -> tuple[np.ndarray, np.ndarray]:
        return trial_columns(zoned, thicknesses, float(problem.breaks[0]), positions, seen)

    zones = None
    try:
        if options.zones == 1:
            posterior = infer(evaluate, problem.breaks if searched else None, progress)
        else:
            one = infer(evaluate, None, functools.partial(_share, progress, 0.0, 0.1))
            tell = functools.partial(_share, progress, 0.1, 0.9)
            model, posterior, zones = _fit_zones(problem, model, seen, one, infer, evaluate_zones, tell)
    except DownwarpError as error:
        raise DownwarpError("{transect}: {why}", transect=problem.profile.name, why=error.message) from None
    fit = _as_fit(problem, model, posterior, seen, searched)
    told += () if zones is None else (_zones_remark(zones.log_odds),)
    return replace(fit, remarks=fit.remarks + told, zones=zones), posterior


def _fit_zones(
    problem: Problem,
    model: TransectModel,
    seen: Observations,
    one: Posterior,
    infer: Callable[[Model, np.ndarray, Progress], Posterior],
    evaluate: Callable[[TransectModel, np.ndarray], tuple[np.ndarray, np.ndarray]],
    tell: Progress,
) -> tuple[TransectModel, Posterior, ZonesFit]:
    """The best plate of two zones, its posterior as that of a fit with the break held, and the zones.

    ``one``: what one zone comes to; ``infer`` and ``evaluate``: the posterior of trials on the line, and the trials.
    """
    low, high = zone_range(problem, seen)
    count = problem.profile.distance.size
    if count > MOST_ZONE_STATIONS:
        raise DownwarpError(
            "TE_ZONES is 2, which takes at most {most} stations, but the line has {count}: give a larger distance "
            "between them (STEP_KM).",
            most=MOST_ZONE_STATIONS,
            count=count,
        )
    rounds = 0

    def run(search: ZoneSearch) -> Posterior:
        nonlocal rounds
        # Half of what is left: how many refinements it takes is not known beforehand.
        rounds += 1
        part = functools.partial(_share, tell, 1.0 - 0.5 ** (rounds - 1), 0.5**rounds)

        @functools.lru_cache(maxsize=search.places.size)
        def at_pair(pair: int, thicknesses: bytes) -> tuple[np.ndarray, np.ndarray]:
            return evaluate(search.model(model, pair), np.frombuffer(thicknesses))

        def trials(thicknesses: np.ndarray, place: float | None) -> tuple[np.ndarray, np.ndarray]:
            # Places between two pairs stand for the nearer one, and the same trials are asked for more than once.
            return at_pair(int(np.floor((place or 0.0) + 0.5)), thicknesses.tobytes())

        return infer(trials, search.places, part)

    search, two = search_zones(run, ZoneSearch.between(low, high) if low < high else ZoneSearch.held(low))
    log_odds = compare(two, one).log_odds + search.log_prior
    found = search.summary(two, problem.options.confidence)
    near, change = Estimate(None), Estimate(None)
    if two.resolved:
        near = Estimate(found.near, found.near_interval.low, found.near_interval.high)
        change = Estimate(found.change, found.change_interval.low, found.change_interval.high)
    if low == high:
        change = Estimate(low)
    best = search.model(model, two.break_at or 0.0)
    # The places searched stand for pairs of share and change, whose bounds the fields of the zones tell.
    remarks = tuple(remark for remark in two.remarks if not remark.startswith("The break is not bounded"))
    as_held = replace(two, break_at=None, break_interval=None, remarks=remarks, surface=_over_places(two))
    return best, as_held, ZonesFit(near, change, log_odds)


def zone_range(problem: Problem, seen: Observations) -> tuple[float, float]:
    """Distances from the break, m, between which the change of thickness is sought; raises DownwarpError."""
    options = problem.options
    stretch = float(seen.distance.max()) - float(problem.breaks[0])
    high = min(ZONE_CHANGES[1], ZONE_PART * stretch) if options.zone_to is None else options.zone_to
    low = min(ZONE_CHANGES[0], 0.5 * high) if options.zone_from is None else options.zone_from
    if not high < stretch:
        raise DownwarpError(
            "ZONE_CHANGE_TO is {high:g} km, but what is fitted reaches {stretch:.0f} km from the break.",
            high=high / 1e3,
            stretch=stretch / 1e3,
        )
    if low > high:
        raise DownwarpError(
            "ZONE_CHANGE_FROM is {low:g} km, but the change is sought up to {high:g} km: give a ZONE_CHANGE_TO beyond "
            "it.",
            low=low / 1e3,
            high=high / 1e3,
        )
    return low, high


def _over_places(posterior: Posterior) -> Surface:
    """The final trials of a search over zones by thickness alone: the least misfit, and the density over all places."""
    surface, grid = posterior.surface, posterior.search.grid
    shape = grid.breaks.size, grid.log_te.size
    rms = surface.rms[-shape[0] * shape[1] :].reshape(shape).min(axis=0)
    density = posterior.te_density.copy()
    density[[0, -1]] *= 2.0  # the ends stand for half a step
    return Surface(posterior.te_grid, np.full(shape[1], np.nan), rms, density / density.max())


def _zones_remark(log_odds: float) -> str:
    """Two zones beside one, in words."""
    size = abs(log_odds)
    odds = f"{np.exp(size):.2g}" if size < 13.8 else say("more than a million")
    if size < DECISIVE and log_odds > 0:
        return say("undecided between two zones of elastic thickness and one (odds {odds} to 1 for two)", odds=odds)
    if size < DECISIVE:
        return say("undecided between two zones of elastic thickness and one (odds {odds} to 1 for one)", odds=odds)
    if log_odds > 0:
        return say("two zones of elastic thickness are preferred to one (odds {odds} to 1)", odds=odds)
    return say("one zone of elastic thickness is preferred to two (odds {odds} to 1)", odds=odds)


def complete_sigma(sigma: np.ndarray) -> np.ndarray | None:
    """Standard deviations with the median in place of unknown ones, none below a fifth of it; None where none is known.

    Strips that happen to agree at a station do not make it certain.
    """
    known = np.isfinite(sigma)
    median = np.median(sigma[known]) if known.any() else 0.0
    if median < LEAST_SIGMA:
        return None
    return np.where(known, np.maximum(sigma, 0.2 * median), median)


def trial_columns(
    model: TransectModel, thicknesses: np.ndarray, break_position: float, positions: np.ndarray, seen: Observations
) -> tuple[np.ndarray, np.ndarray]:
    """Offsets (T, N), m up, and columns (T, N, p) of the predicted surface at positions, for thicknesses (T,) in m.

    Before the break of a broken plate they hold the regional alone. ``seen``: what infill that follows the deflection is
    found with.
    """
    first = break_position if model.kind == BROKEN else -np.inf
    on_plate = np.maximum(positions, first)
    if model.fill is None:
        offsets, columns = model.columns(thicknesses, break_position, on_plate)
    else:
        parts = [
            _filled(model, float(each), break_position, seen).columns(each[None], break_position, on_plate)
            for each in thicknesses
        ]
        offsets, columns = (np.concatenate([part[i] for part in parts]) for i in range(2))
    columns[:, :, len(model.end_forces) :] = model.regional_columns(positions)
    beyond = positions >= first
    offsets[:, ~beyond] = 0.0
    columns[:, ~beyond, : len(model.end_forces)] = 0.0
    return offsets, columns


def _filled(model: TransectModel, thickness: float, break_position: float, seen: Observations) -> TransectModel:
    """The model with infill where the plate sinks under its best-fitting end forces."""
    count, forces = seen.distance.size, len(model.end_forces)

    def sunk(bent: TransectModel, at: np.ndarray) -> np.ndarray:
        places = np.concatenate([seen.distance, at])
        offsets, columns = (part[0] for part in bent.columns(np.array([thickness]), break_position, places))
        scale = np.maximum(np.abs(columns[:count]).max(axis=0), 1e-300)
        best = np.linalg.lstsq(columns[:count] / scale, seen.elevation - offsets[:count], rcond=None)[0] / scale
        return -offsets[count:] - columns[count:, :forces] @ best[:forces]

    return model.filled_where(sunk, break_position)[0]


def _as_fit(problem: Problem, model: TransectModel, posterior: Posterior, seen: Observations, searched: bool) -> Fit:
    stations = problem.profile.distance
    thickness = posterior.te
    break_position = posterior.break_at if posterior.break_at is not None else float(problem.breaks[0])
    names = model.end_forces + REGIONAL_NAMES[: model.regional]
    coefficients = {
        name: Estimate(float(value), float(low), float(high))
        for name, value, low, high in zip(names, posterior.linear, posterior.linear_low, posterior.linear_high)
    }
    if not posterior.resolved:
        # As the thickness, they may be anything.
        coefficients.update({name: Estimate(coefficients[name].value) for name in model.end_forces})
    in_fit = np.zeros(stations.shape, dtype=bool)
    in_fit[seen.station[seen.station >= 0]] = True
    values = {name: estimate.value or 0.0 for name, estimate in coefficients.items()}
    bent = bend_problem(
        problem,
        model,
        thickness,
        break_position,
        values,
        tuple(values[name] for name in REGIONAL_NAMES[: model.regional]),
        (posterior.predicted_low[: stations.size], posterior.predicted_high[: stations.size]),
        in_fit,
    )
    interval = posterior.te_interval
    has_break = model.kind == BROKEN or bool(model.end_forces)
    if not has_break:
        place = Estimate(None)
    elif searched and posterior.break_interval is not None:
        place = Estimate(break_position, posterior.break_interval.low, posterior.break_interval.high)
    else:
        place = Estimate(break_position)
    noise = posterior.noise
    surface = posterior.surface
    misfit = tuple(
        MisfitRow(
            model.kind,
            float(te),
            break_position if has_break and not searched else float(at) if searched else None,
            float(rms),
            float(likelihood),
        )
        for te, at, rms, likelihood in zip(surface.te, surface.break_at, surface.rms, surface.relative_likelihood)
    )
    return Fit(
        model.kind,
        Estimate(thickness if posterior.resolved else None, interval.low, interval.high),
        place,
        coefficients,
        posterior.rms,
        seen.distance.size,
        noise.effective_stations,
        (
            Parameter("residual_size", noise.size, "m", MEASURED),
            Parameter(CORRELATION_LENGTH, noise.length / 1e3, "km", MEASURED),
            Parameter("residual_white_share", noise.white_share, "1", MEASURED),
            Parameter("log_odds_of_bending", posterior.log_odds_bent, "1", FITTED),
        ),
        misfit,
        bent,
        tuple(posterior.remarks),
    )


def parameters_in_use(problem: Problem, fit: Fit) -> tuple[Parameter, ...]:
    """Every value behind a fit and where it came from."""
    options, rho, elastic = problem.options, problem.densities, problem.options.elastic
    km = 1e3
    thickness = fit.thickness
    rows = [_row("te", thickness, "km", FITTED, km)]
    rigidity = [None if value is None else float(elastic.rigidity(value)) for value in _three(thickness)]
    rows.append(Parameter("rigidity", rigidity[0], "N m", FITTED, rigidity[1], rigidity[2]))
    stiffness = (rho.mantle - rho.infill) * elastic.gravity
    alpha = [None if value is None else float(flexural_parameter(value, stiffness)) / km for value in rigidity]
    rows.append(Parameter("flexural_parameter", alpha[0], "km", FITTED, alpha[1], alpha[2]))
    if fit.zones is not None:
        held = options.zone_from is not None and options.zone_from == options.zone_to
        rows.append(_row("te_near", fit.zones.near, "km", FITTED, km))
        rows.append(_row("zone_change", fit.zones.change, "km", GIVEN if held else FITTED, km))
        rows.append(Parameter("log_odds_of_two_zones", fit.zones.log_odds, "1", FITTED))
        limits = zone_range(problem, problem.observations())
        for key, given, value in zip(
            ("ZONE_CHANGE_FROM", "ZONE_CHANGE_TO"), (options.zone_from, options.zone_to), limits
        ):
            rows.append(Parameter(key, value / km, "km", MEASURED if given is None else GIVEN))
    if fit.break_position.value is not None:
        rows.append(_row("break", fit.break_position, "km", problem.break_origin, km))
    units = {"end_shear": "N/m", "end_moment": "N", "level": "m", "tilt": "m/km", "bow": "m/km2"}
    scales = {"tilt": 1 / km, "bow": 1 / km**2}
    for name, estimate in fit.coefficients.items():
        label = f"regional_{name}" if name in REGIONAL_NAMES else name
        rows.append(_row(label, estimate, units[name], FITTED, scales.get(name, 1.0)))
    rows += fit.noise
    rows.append(Parameter("rms", fit.rms, "m", FITTED))
    if problem.reference_level is not None:
        rows.append(Parameter("REFERENCE_LEVEL", problem.reference_level, "m", problem.reference_origin))
    for key in ("break_at", "load", "end_forces", "regional"):
        value, origin = options.chosen(key)
        rows.append(Parameter(key.upper(), float(value), "", origin))
    value, origin = options.chosen("plate")
    rows.append(Parameter("PLATE", float(value), "", origin))
    rows.append(Parameter("SETTING", float(options.setting), "", GIVEN))
    for key, density in (
        ("rho_load", rho.load),
        ("rho_infill", rho.infill),
        ("rho_under_load", rho.under_load),
        ("rho_mantle", rho.mantle),
        ("rho_water", rho.water),
    ):
        rows.append(Parameter(key.upper(), density, "kg/m3", problem.density_origins[key]))
    rows += [
        Parameter("YOUNG_GPA", elastic.young / 1e9, "GPa", GIVEN),
        Parameter("POISSON", elastic.poisson, "1", GIVEN),
        Parameter("GRAVITY", elastic.gravity, "m/s2", GIVEN),
        Parameter("IN_PLANE", options.in_plane, "N/m", GIVEN),
        Parameter("TE_FROM", options.te_from / km, "km", GIVEN),
        Parameter("TE_TO", options.te_to / km, "km", GIVEN),
        Parameter("CONFIDENCE", options.confidence * 100, "%", GIVEN),
        Parameter("ROBUST", float(options.robust), "", GIVEN),
        Parameter("FILL_SINKING_ONLY", float(options.fill_sinking_only), "", GIVEN),
        Parameter("LOAD_SHAPE", float(options.load_shape), "", GIVEN),
        Parameter("TE_ZONES", float(options.zones), "", GIVEN),
    ]
    for key, given, scale, unit in (
        ("FILL_LEVEL", options.fill_level, 1.0, "m"),
        ("BREAK_KM", options.break_position, km, "km"),
        ("BREAK_FROM", options.break_from, km, "km"),
        ("BREAK_TO", options.break_to, km, "km"),
        ("LOAD_FROM", options.load_from, km, "km"),
        ("LOAD_TO", options.load_to, km, "km"),
        ("FIT_FROM", options.fit_from, km, "km"),
        ("FIT_TO", options.fit_to, km, "km"),
        ("SIGMA_M", options.sigma, 1.0, "m"),
    ):
        if given is not None:
            rows.append(Parameter(key, given / scale, unit, GIVEN))
    spacing = float(np.diff(problem.profile.distance).mean()) / km
    rows.append(Parameter("STEP_KM", spacing, "km", MEASURED))
    return tuple(rows)


def _three(estimate: Estimate) -> tuple[float | None, float | None, float | None]:
    return estimate.value, estimate.low, estimate.high


def _row(name: str, estimate: Estimate, unit: str, origin: str, scale: float) -> Parameter:
    value, low, high = (None if each is None else each / scale for each in _three(estimate))
    return Parameter(name, value, unit, origin, low, high)

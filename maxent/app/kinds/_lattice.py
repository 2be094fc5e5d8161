"""What the lattice kinds share: formulas on sites become a family in a symmetry basis, a start gives targets.

Floor: app/kinds, the only place besides the quench and lab floors that knows lattice and families together.
Must not know: the command line, the report.
"""

from __future__ import annotations

import re
from collections.abc import Callable, Mapping
from dataclasses import dataclass, field, replace
from pathlib import Path as File
from typing import TYPE_CHECKING, Any, Literal

from maxent.app.job import (
    ACCURACY,
    STRICT,
    TARGET,
    BadInput,
    Job,
    Problems,
    Room,
    Study,
    Target,
    check_target,
    given_target,
    says,
)  # fmt: skip
from maxent.app.kinds._gaussian import METHOD, SECTORS, check_gaussian, gaussian_job
from maxent.app.kinds._geometry import Geometry
from maxent.app.kinds._momentum import MOMENTUM, Momentum
from maxent.app.kinds._names import check_names
from maxent.app.kinds._starts import StartMaker, StartTable, as_start
from maxent.app.kinds._thermodynamics import THERMODYNAMICS, LatticeThermodynamics, check_roles, lattice_roles
from maxent.app.kinds._workload import Workload, estimate
from maxent.app.locate import Path
from maxent.errors import FormulaError, ResourceError
from maxent.memory import require_memory
from maxent.text import listing, number, plural, suggestion

if TYPE_CHECKING:
    from maxent.app.data import Files

__all__ = ["LatticeOptions", "Quench", "build", "hamiltonian"]

#: Columns of the table of levels that are no observables, as in maxent/quench/comparison.py, which is slow to import.
TAKEN = ("energy", "level", "weight")
#: Spaces with fewer states are not worth a change of basis.
SMALL = 64
#: Problems that take so many seconds or more are surveyed first and built when they are to be solved.
QUICK = 2.0
_EPS = 2.0**-52


@dataclass(frozen=True)
class Quench:
    """Comparison of the ensembles with the long-time state."""

    __pydantic_config__ = STRICT

    observables: dict[str, str] = field(
        default_factory=dict,
        metadata=says("Name -> formula of an operator whose means are compared; the predictions by default."),
    )
    blocks: list[int] = field(
        default_factory=lambda: [1, 2, 3, 4],
        metadata=says("Numbers of neighbouring sites whose states are compared; `[1, 2, 3, 4]` by default."),
    )
    window: float | None = field(
        default=None,
        metadata=says("Width of the energy windows, Gaussian and sharp; the energy spread of the start by default."),
    )
    times: float | list[float] | None = field(
        default=None,
        metadata=says("Times of the traces: the last of 400, or a list; up to four revival times by default."),
    )
    speed: float | None = field(
        default=None, metadata=says("Largest group velocity in sites per time, where it is known; else estimated.")
    )
    insist: list[str] = field(
        default_factory=list,
        metadata=says("Charges that are kept although they are not conserved: the state is not stationary then."),
    )
    resolution: float | None = field(
        default=None, metadata=says("Time up to which equal gaps are told apart.")
    )
    ranking: bool = field(default=True, metadata=says("Whether the charges are ranked, which costs further fits."))


@dataclass(frozen=True)
class LatticeOptions:
    """Keys that all lattice kinds share."""

    __pydantic_config__ = STRICT

    sites: Geometry = field(metadata=says("Where the sites lie and what lives on them."))
    charges: dict[str, str] = field(metadata=says("Name of a charge -> formula of a Hermitian operator."))
    targets: dict[str, float | Literal["from start"] | Room] = field(
        metadata=says(f"Name of a charge -> the mean asked for, or its mean in the state `[start]`. {TARGET}")
    )
    parameters: dict[str, float | list[float]] = field(
        default_factory=dict,
        metadata=says("Name -> number, or a list with one number per position; used in formulas."),
    )
    densities: dict[str, str] = field(
        default_factory=dict,
        metadata=says("Name -> formula with one free subscript; other formulas may use it shifted, `h[i+1]`."),
    )
    start: StartTable | None = field(
        default=None, metadata=says("State that gives targets and that the quench starts from; one way to make it.")
    )
    accuracy: dict[str, float] = field(default_factory=dict, metadata=says(ACCURACY))
    predictions: dict[str, str] = field(
        default_factory=dict, metadata=says("Name -> formula of a further operator whose mean is wanted.")
    )
    hamiltonian: str = field(
        default="energy",
        metadata=says("Name of the charge that is the Hamiltonian, for `[quench]` and `multipliers charges`."),
    )
    method: Literal["matrices", "gaussian"] = field(default="matrices", metadata=says(METHOD))
    sectors: Literal["both", "even", "odd", "unprojected"] = field(default="both", metadata=says(SECTORS))
    momentum: Momentum | None = field(default=None, metadata=says(MOMENTUM))
    thermodynamics: LatticeThermodynamics | None = field(default=None, metadata=says(THERMODYNAMICS))
    quench: Quench | None = field(
        default=None,
        metadata=says("With this table, even empty, ensembles are compared with the long-time state: docs/quench.md."),
    )


def build(options: LatticeOptions, folder: File) -> Job:
    """Build the job that the options describe.

    Parameters
    ----------
    options : LatticeOptions
    folder : pathlib.Path
        Relative names of files start here.

    Returns
    -------
    Job

    Raises
    ------
    BadInput
        With all problems at once.
    """
    problems = Problems()
    gaussian = options.method == "gaussian"
    every = options.sites.arrange(problems, listed=not gaussian)
    check_gaussian(options, problems)
    _check_quench(options, problems)
    check_roles(options.thermodynamics, options.charges, problems, usual=options.hamiltonian)
    problems.raise_any()
    sites = every[options.sites.largest]
    if not gaussian:
        _refuse_too_large(options, sites, problems)
    from maxent.app.data import Files

    files = Files(folder)
    parts = {size: _Part(options, s, files, problems) for size, s in every.items()}
    if options.hamiltonian not in (*options.charges, "energy"):
        name = options.hamiltonian
        problems.add(("hamiltonian",), f"no charge is called {name!r}{suggestion(name, options.charges)}")
    for name, given in options.targets.items():
        check_target(("targets", name), given, problems)
        if given == "from start" and options.start is None:
            problems.add(("targets", name), "asks for the mean 'from start', but there is no [start]")
    problems.raise_any()
    work = None if gaussian else _workload(options, parts[options.sites.largest], problems)
    if options.quench is not None and not gaussian:
        for part in parts.values():
            part.refuse_not_conserved(problems)
        problems.raise_any()
    part = parts[options.sites.largest]
    roles = lattice_roles(options, part, problems)
    problems.raise_any()
    if gaussian:
        return replace(gaussian_job(options, parts, _facts(options, sites, ""), files.digests), roles=roles)
    study = None
    if options.quench is not None:
        study = Study(options.sites.all_sizes, lambda size: parts[size].arguments())
    job = Job(
        None, part.targets(), facts=_facts(options, sites, ""), digests=files.digests, remarks=part.remarks,
        study=study, roles=roles, count=sites.states,
    )  # fmt: skip

    def prepare() -> Job:
        matrices = {name: _matrix(("charges", name), op) for name, op in part.charges.items()}
        observed = {name: _matrix(("predictions", name), op) for name, op in part.predictions.items()}
        family, symmetries = _family(part, matrices)
        return replace(job, family=family, predictions=observed, facts=_facts(options, sites, symmetries), count=None)

    if work is None or work.seconds < QUICK:
        return prepare()
    return replace(job, prepare=prepare, expected=work.facts)


def hamiltonian(options: LatticeOptions) -> Any:
    """Read the charge that is the Hamiltonian, without any matrix.

    Parameters
    ----------
    options : LatticeOptions
        For several sizes, the largest counts.

    Returns
    -------
    OperatorSum

    Raises
    ------
    BadInput
        With all problems of this formula and of the densities.
    """
    problems = Problems()
    every = options.sites.arrange(problems, listed=options.method != "gaussian")
    problems.raise_any()
    name = options.hamiltonian
    if name not in options.charges:
        raise BadInput([(("hamiltonian",), f"no charge is called {name!r}{suggestion(name, options.charges)}")])
    operator = _Formulas(options, every[options.sites.largest], problems).read(("charges", name), options.charges[name])
    problems.raise_any()
    return operator


class _Formulas:
    """Reader of the formulas of one config.

    A bad density is reported once, at its own line, and not again for every formula that uses it.
    """

    def __init__(self, options: LatticeOptions, sites: Any, problems: Problems):
        from maxent.lattice import formula

        self.options, self.sites, self.problems = options, sites, problems
        self.bad: set[str] = set()
        check_names(sites, options.parameters, options.densities, problems)
        for name, text in options.densities.items():
            try:
                formula(text, sites, options.parameters, options.densities)
            except FormulaError as bad:
                problems.add(("densities", name), str(bad))
                self.bad.add(name)

    def read(self, path: Path, text: str) -> Any:
        """Read a Hermitian operator; None after a problem."""
        from maxent.lattice import formula

        if any(re.search(rf"\b{re.escape(name)}\b", text) for name in self.bad):
            return None
        try:
            operator = formula(text, self.sites, self.options.parameters, self.options.densities)
        except FormulaError as bad:
            self.problems.add(path, str(bad))
            return None
        word = operator.non_hermitian_word
        if word is not None:
            self.problems.add(path, f"not Hermitian: it holds {word}")
            return None
        return operator


class _Part:
    """Everything that a config says of one size."""

    def __init__(self, options: LatticeOptions, sites: Any, files: Files, problems: Problems):
        self.options, self.sites = options, sites
        formulas = _Formulas(options, sites, problems)
        self.charges = {n: formulas.read(("charges", n), text) for n, text in options.charges.items()}
        self.predictions = {n: formulas.read(("predictions", n), text) for n, text in options.predictions.items()}
        self.observables = self.predictions
        if options.quench is not None and options.quench.observables:
            given = options.quench.observables
            self.observables = {n: formulas.read(("quench", "observables", n), text) for n, text in given.items()}
        self._make: Callable[[], Any] | None = None
        if options.start is not None:
            gaussian = options.method == "gaussian"
            maker = StartMaker(sites, options.parameters, formulas.read, files, problems, gaussian=gaussian)
            self._make = maker.prepare(options.start)
        self._made: Any = None

    @property
    def start(self) -> Any:
        """The start, a `LocalProduct` or a `Start`."""
        if self._made is None and self._make is not None:
            self._made = self._make()
        return self._made

    @property
    def drives(self) -> Any:
        """The Hamiltonian; None where no charge is it."""
        return self.charges.get(self.options.hamiltonian)

    def targets(self, matrices: Mapping[str, Any] | None = None) -> dict[str, Target]:
        """Targets of every charge; those from the start have the accuracy of the calculation at least."""
        out = {}
        for name, operator in self.charges.items():
            given, stated = self.options.targets[name], self.options.accuracy.get(name, 0.0)
            if isinstance(given, str):
                value, accuracy = self._mean(name, operator, matrices)
                out[name] = Target(value, "mean in the start state", accuracy=max(stated, accuracy))
            else:
                out[name] = given_target(given, stated)
        return out

    def _mean(self, name: str, operator: Any, matrices: Mapping[str, Any] | None) -> tuple[float, float]:
        from maxent.lattice.starts import LocalProduct

        if not isinstance(self.start, LocalProduct):
            return self.start.mean(_matrix(("charges", name), operator) if matrices is None else matrices[name])
        # every word is a product of as many means as it has letters, each right to two units in the last place
        size = sum(abs(a) * (1 + len(word)) for word, a in zip(operator.words, operator.coefficients, strict=True))
        return self.start.mean(operator), 2 * _EPS * float(size)

    def arguments(self) -> dict[str, Any]:
        """Keyword arguments of `compare`."""
        import numpy as np

        asked, options = self.options.quench, self.options
        assert asked is not None and options.start is not None
        times: Any = asked.times
        if isinstance(times, float | int):
            times = np.linspace(0.0, times, 400)
        try:
            start = as_start(self.start, options.start.describe())
        except ResourceError as bad:
            raise BadInput([(("start",), str(bad))]) from bad
        return {
            "charges": self.charges,
            "start": replace(start, label=options.start.describe()),
            "hamiltonian": options.hamiltonian,
            "observables": self.observables,
            "blocks": tuple(sorted(set(asked.blocks))),
            "width": asked.window,
            "times": times,
            "speed": asked.speed,
            "insist": tuple(asked.insist),
            "resolution": asked.resolution,
            "ranking": asked.ranking,
            "numbers": None if options.thermodynamics is None else options.thermodynamics.numbers,
            "fields": None if options.thermodynamics is None else options.thermodynamics.fields,
        }

    @property
    def _bosonic(self) -> bool:
        from maxent.lattice import Bosons

        return any(isinstance(kind, Bosons) for kind in self.sites.kinds)

    # ------------------------------------------------------------------ conservation

    def not_conserved(self) -> Any:
        """What the Hamiltonian does to the charges whose commutator with it holds words; None where none has."""
        from maxent.quench.conservation import check_conservation

        if self.drives is None:
            return None
        if self._bosonic:  # a cut-off may break what the exact algebra keeps: only matrices can tell
            found = check_conservation(self.drives.matrix(), {n: q.matrix() for n, q in self.charges.items()})
            return found if found.broken else None
        doubtful = {n: q for n, q in self.charges.items() if q is not self.drives and self.drives.commutator(q).words}
        if not doubtful:
            return None
        found = check_conservation(self.drives, doubtful)
        return found if found.broken else None

    def refuse_not_conserved(self, problems: Problems) -> None:
        """Note charges of a stationary state that the Hamiltonian does not conserve."""
        from maxent.quench.conservation import require_conserved

        found, asked = self.not_conserved(), self.options.quench
        assert asked is not None
        if found is None:
            return
        for name in found.broken:
            if name not in asked.insist:
                try:
                    require_conserved(found, [name])
                except ValueError as bad:
                    problems.add(("charges", name), f"{bad}: insist = [{name!r}] in [quench]")

    def notes(self, result: Any) -> list[str]:
        """What the start has to say."""
        note = getattr(self._made, "note", "")
        return [f"Start: {note}"] if note else []

    def remarks(self, result: Any) -> list[str]:
        """What a reader of the result must know: no stationary state, a cut-off that is felt."""
        said = self.notes(result)
        broken = None if result.state is None else self.not_conserved()
        if broken is not None:
            from maxent.quench.conservation import require_conserved, state_defect

            defect = state_defect(self.drives, result.state)
            said.append(
                f"{require_conserved(broken, broken.broken, insist=broken.broken)} Its relative commutator "
                f"|[H, rho]| is {number(defect, 3)} of the largest possible, H being {self.options.hamiltonian!r}."
            )
        return said + self._cutoffs(result)

    def _cutoffs(self, result: Any) -> list[str]:
        if not self._bosonic:
            return []
        from maxent.lattice import cutoff_loss

        said = []
        if self.options.start is not None:
            start = as_start(self.start, "start")
            said.append(("In the start", cutoff_loss(self.sites, start.vectors, weights=start.weights).warning()))
        if result.state is not None:
            said.append(("In the state found", cutoff_loss(self.sites, result.state).warning()))
        return [f"{where} {text}." for where, text in said if text]


def _check_quench(options: LatticeOptions, problems: Problems) -> None:
    """Note what [quench] cannot do with the rest of the config."""
    asked = options.quench
    if asked is None:
        if options.sites.sizes is not None:
            problems.add(("sites", "sizes"), "several sizes are for [quench]; give one `size`")
        return
    if options.start is None:
        problems.add(("quench",), "needs a [start]")
    if options.hamiltonian not in options.charges:
        name = options.hamiltonian
        hint = suggestion(name, options.charges)
        problems.add(("quench",), f"no charge is called {name!r}, which should be the Hamiltonian{hint}")
    for name, given in options.targets.items():
        if given != "from start":
            problems.add(("targets", name), "with [quench] every target is 'from start': the dynamics keeps them")
    for name in asked.insist:
        if name not in options.charges:
            problems.add(("quench", "insist"), f"no charge is called {name!r}{suggestion(name, options.charges)}")
    for key, value in (("window", asked.window), ("speed", asked.speed), ("resolution", asked.resolution)):
        if value is not None and not value > 0:
            problems.add(("quench", key), f"must be positive, got {number(value)}")
    above = ("quench", "observables") if asked.observables else ("predictions",)
    for name in asked.observables or options.predictions:
        if name in TAKEN:
            problems.add((*above, name), "this name is taken in the table of levels of [quench]; choose another")
    if not asked.blocks or min(asked.blocks) < 1:
        problems.add(("quench", "blocks"), f"expected numbers of sites from 1 on, got {asked.blocks}")
    times = asked.times
    if isinstance(times, list) and (not times or min(times) < 0):
        problems.add(("quench", "times"), "expected at least one time, none of them negative")
    elif isinstance(times, float | int) and not times > 0:
        problems.add(("quench", "times"), f"the last time must be positive, got {number(times)}")
    if options.start is not None and options.start.file is not None and len(options.sites.all_sizes) > 1:
        problems.add(("start", "file"), "a file holds the start of one size; give one `size`")


def _family(part: _Part, matrices: Mapping[str, Any]) -> tuple[Any, str]:
    """Family of the charges in the basis of their symmetries, and what these are."""
    import scipy.sparse as sp

    from maxent.families.matrices import Matrices
    from maxent.lattice.symmetries import adapted_basis, blocked

    dims = part.sites.dims
    mixing = any((q - sp.diags_array(q.diagonal())).count_nonzero() for q in matrices.values())
    if not mixing or part.sites.states < SMALL:  # numbers on states already, or nothing to gain
        return Matrices(dict(matrices), dims=dims), ""
    basis = adapted_basis(part.charges, part.sites)
    if basis is None:
        return Matrices(dict(matrices), dims=dims), ""
    names = [f"{m.name.replace('_', ' ')} ({plural(len(set(basis.labels[m.name])), 'sector')})" for m in basis.maps]
    if basis.is_real:
        names.append("sectors real")
    return Matrices(blocked(matrices, basis), basis=basis.matrix, dims=dims), ", ".join(names)


def _facts(options: LatticeOptions, sites: Any, symmetries: str) -> dict[str, str]:
    """What was built, for people."""
    size = sites.size
    names = list(dict.fromkeys(kind.name for kind in sites.kinds))
    what = f"{options.sites.geometry} of {plural(size, f'{names[0]} site')}"
    if len(names) > 1:
        what = f"{options.sites.geometry} of {plural(size, 'site')}: {listing(names, 'and')}"
    if len(sites.cell) > 1:
        what += f", {plural(sites.length, 'cell')} of {listing(sites.cell, 'and')}"
    facts = {"sites": what} | ({} if options.method == "gaussian" else {"states": str(sites.states)})
    if options.sites.sizes is not None:
        facts["sizes"] = ", ".join(map(str, options.sites.all_sizes))
    if symmetries:
        facts["symmetries"] = symmetries
    if options.start is not None:
        facts["start"] = options.start.describe()
    facts |= {f"parameter {name}": str(value) for name, value in options.parameters.items()}
    facts |= {f"density {name}": text for name, text in options.densities.items()}
    facts |= {f"charge {name}": text for name, text in options.charges.items()}
    return facts


def _refuse_too_large(options: LatticeOptions, sites: Any, problems: Problems) -> None:
    """Refuse sizes for which not even the diagonals of the charges fit: given, shifted and whitened."""
    count, states = len(options.charges), sites.states
    cell = len(set(sites.dims)) == 1
    text = f"{sites.dims[0]}^{sites.size}" if cell else str(states)
    key = "size" if options.sites.sizes is None else "sizes"
    try:
        require_memory(3 * 8 * count * states, f"{text} states need at least {{need}} for {plural(count, 'charge')}")
    except ResourceError as bad:
        problems.add(("sites", key), str(bad))
        problems.raise_any()


def _workload(options: LatticeOptions, part: _Part, problems: Problems) -> Workload | None:
    """Estimate the work; refuse blocks that do not fit, and times that mean nothing, before it begins."""
    asked = options.quench
    try:
        work = estimate(part.charges, part.sites, study=asked is not None)
    except ResourceError as bad:
        problems.add(("sites", "size" if options.sites.sizes is None else "sizes"), str(bad))
        work = None
    times = [] if asked is None or asked.times is None else asked.times
    last = max(times, default=0.0) if isinstance(times, list) else times
    if last > 0 and (horizon := _longest_horizon(part)) < last:
        text = f"time {last:.3g} is beyond {horizon:.3g}, where rounding of the energies makes phases meaningless"
        problems.add(("quench", "times"), text)
    problems.raise_any()
    return work


def _longest_horizon(part: _Part) -> float:
    """No time beyond this one is within the horizon of an evolution: images of states bound the energies from below."""
    import numpy as np

    from maxent.lattice.reach import column_lengths
    from maxent.quench.evolution import PHASE

    states = np.unique(np.linspace(0, min(part.sites.states, 2**62) - 1, 64).astype(np.int64))
    energy = float(column_lengths(part.drives, states).max())
    return PHASE / (4 * _EPS * energy) if energy > 0 else np.inf


def _matrix(path: tuple[str, str], operator: Any) -> Any:
    try:
        return operator.matrix()
    except ResourceError as bad:
        raise BadInput([(path, str(bad))]) from bad  # at once: trying the other operators would take long

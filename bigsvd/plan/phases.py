"""What a run costs, phase by phase: pure arithmetic on a plan and the rates of a machine."""

from __future__ import annotations

from collections.abc import Mapping, Sequence
from dataclasses import dataclass, field

from bigsvd.plan.memory import SLICE_ENTRIES, tile_columns
from bigsvd.plan.plan import Plan
from bigsvd.plan.rates import COMPLEX_FACTOR, NOMINAL, Rate, Rates
from bigsvd.plan.sparse import nonzero_costs, stored_share
from bigsvd.source import MatrixSpec

# Phases that the workers share, and those of the caller, in the order in which they are told.
SHARED = ("read", "convert", "products", "fold", "scratch")
CALLER = ("start", "waiting", "dense", "slices", "store")
# Products of the sample before its directions are settled, and the last one.
PILOT_PRODUCTS = 4
# Panels of a sweep in single, and of a pilot, whose first unit is multiplied again in double to measure rounding.
MEASURED_PANELS, MEASURED_IN_PILOT = 8, 4
# Slices that are checked, at most, and their share of the matrix.
MOST_SLICES = 3
SLICE_SHARE = 0.01
# Columns that a slice may have however few its lines, and longer side times the square of the shorter, at most.
SLICE_ACROSS, SLICE_FLOPS = 256, 2.5e8
# At the end of a sweep a worker waits for the other's last segment: so much of its time on average.
IDLE = 0.6
# A triangle is inverted, multiplied and factored, 3·columns² flops a line; Householder takes 2, slowly.
FOLD_FLOPS = 3


@dataclass(frozen=True)
class Costs:
    """Seconds of every phase of a run.

    Attributes
    ----------
    shared : mapping of str to float
        Worker-seconds: the sum over the workers.
    caller : mapping of str to float
        Seconds.
    workers : int
    """

    shared: Mapping[str, float]
    caller: Mapping[str, float]
    workers: int

    @property
    def wall(self) -> dict[str, float]:
        """Seconds on the clock, by phase."""
        return {name: spent / self.workers for name, spent in self.shared.items()} | dict(self.caller)

    @property
    def seconds(self) -> float:
        """Seconds on the clock, of the whole run."""
        return sum(self.wall.values())


@dataclass
class _Ledger:
    """Costs as they are added up."""

    workers: int
    pace: Mapping[str, float]
    spent: dict[str, float] = field(default_factory=lambda: dict.fromkeys((*SHARED, *CALLER), 0.0))

    def work(self, phase: str, amount: float, rate: Rate) -> None:
        """Add work that the workers share."""
        self.spent[phase] += rate.seconds(amount, self.workers) * self.pace.get(phase, 1.0)

    def wait(self, phase: str, seconds: float) -> None:
        """Add seconds of the caller."""
        self.spent[phase] += seconds * self.pace.get(phase, 1.0)

    def close(self, plan: Plan) -> Costs:
        """The sums; where a sweep has few segments, workers wait longer for the last of them."""
        shared = {name: self.spent[name] for name in SHARED}
        if self.workers > 1:
            segments = sum(map(len, plan.waves)) or plan.leaves
            self.spent["waiting"] += IDLE / segments * sum(shared.values()) / self.workers
        return Costs(shared, {name: self.spent[name] for name in CALLER}, self.workers)


def predict(
    plan: Plan,
    sweeps: float | None = None,
    *,
    columns: float | None = None,
    single: bool | None = None,
    pace: Mapping[str, float] | None = None,
    rates: Rates = NOMINAL,
) -> Costs:
    """Cost of a run that takes so many sweeps.

    Parameters
    ----------
    plan : Plan
    sweeps : float or None
        Reads of the whole matrix, that of a whole spectrum included; None for those that the plan expects.
    columns : float or None
        Columns multiplied in all of them; None for as many as the plan provides for.
    single : bool or None
        Whether products are made in single precision; None for what the plan expects.
    pace : mapping of str to float, or None
        By phase, time on this machine over time at these rates; 1 where nothing is said.
    rates : Rates

    Returns
    -------
    Costs
    """
    sweeps = plan.nominal_sweeps if sweeps is None else sweeps
    if single is None:
        single = plan.may_be_single and plan.request.precision != "double"
    model = _Model(plan, "single" if single else "double", rates, _Ledger(plan.workers, pace or {}))
    model.run(sweeps, columns)
    return model.ledger.close(plan)


def pass_costs(plan: Plan, share: float, columns: int, *, single: bool, rates: Rates = NOMINAL) -> Costs:
    """Cost of reading, converting and multiplying a share of the matrix, energies summed, and nothing else.

    Parameters
    ----------
    plan : Plan
    share : float
    columns : int
    single : bool
    rates : Rates

    Returns
    -------
    Costs
    """
    model = _Model(plan, "single" if single else "double", rates, _Ledger(plan.workers, {}))
    model.read(share)
    model.convert(share, model.work, energies=True, sums=False)
    model.products(share, columns)
    return model.ledger.close(plan)


@dataclass(frozen=True)
class _Model:
    """The parts of a run."""

    plan: Plan
    work: str
    rates: Rates
    ledger: _Ledger

    @property
    def entries(self) -> float:
        return float(self.plan.geometry.lines) * self.plan.geometry.across

    @property
    def complex(self) -> float:
        """Flops of a complex operation over those of a real one."""
        return COMPLEX_FACTOR if self.plan.spec.dtype.kind == "c" else 1.0

    def run(self, sweeps: float, columns: float | None) -> None:
        """Everything in turn."""
        plan, rates = self.plan, self.rates
        self.ledger.wait("start", rates.start_seconds)
        if plan.spec.missing is not None:
            self._count_missing(plan.spec.missing.bytes)
        if plan.route == "krylov":
            self._pilot()
            blocks = _blocks(plan, sweeps, columns)
        else:
            self._whole_spectrum()
            blocks = _blocks(plan, max(0.0, sweeps - 1), columns)
        stored = 0.0
        for number, (share, block) in enumerate(blocks):
            self._basis_sweep(share, block, stored, first=number == 0 and plan.route == "krylov")
            stored += share * block
        self._slices()
        self._store(stored)

    def read(self, share: float) -> None:
        """Fetch and decode a share of the matrix."""
        plan, rates = self.plan, self.rates
        spec = plan.spec
        size = share * spec.decoded_bytes * plan.geometry.amplification
        if plan.products == "dense":
            self.ledger.work("read", size, rates.fetch[spec.storage])
        if spec.storage in ("plain", "compressed", "zarr") and spec.chunks[0] > 1:
            # Chunks at the edge are stored whole.
            size *= padding(spec)
            self.ledger.work("read", size / max(1, chunk_bytes(spec)), rates.chunk)
        if spec.nonzeros is not None:
            # Beside the buffer that is cleared, what is stored is read; what is decoded are values and 32-bit indices.
            stored = share * spec.nonzeros * plan.geometry.amplification
            self.ledger.work("read", stored, rates.entries)
            size = stored * (spec.dtype.itemsize + 4)
        for codec in spec.codecs:
            self.ledger.work("read", size, rates.decode.get(codec, rates.decode["library"]))

    def convert(self, share: float, work: str, *, energies: bool, sums: bool, twice: bool = True) -> None:
        """Words summed, entries converted, and in a first sweep squared and summed."""
        plan, rates, add = self.plan, self.rates, self.ledger.work
        if plan.products == "sparse":
            for amount, rate in nonzero_costs(plan, share, energies=energies, sums=sums, rates=rates):
                add("convert", amount, rate)
            return
        entries = share * self.entries * (2 if plan.spec.dtype.kind == "c" else 1)
        add("convert", share * plan.spec.decoded_bytes, rates.ledger)
        across_features = plan.geometry.lines_are_samples
        as_stored = plan.spec.dtype.str[1:] in (("f4", "c8") if work == "single" else ("f8", "c16"))
        if not as_stored or plan.centred or plan.scaled:
            tiled = twice and plan.geometry.across > tile_columns(plan.geometry.across)
            add("convert", entries * (2 if tiled else 1), rates.convert[work])
        if (plan.centred or plan.scaled) and not across_features:
            add("convert", entries, rates.statistics)
        if energies:
            add("convert", entries, rates.energy[work])
        if sums and across_features and plan.centred:
            add("convert", entries, rates.sums[work])
        if sums and across_features and plan.scaled:
            add("convert", entries, rates.learn)

    def products(self, share: float, block: float) -> None:
        """Y = AB and Z = AᴴY, which is added up once per unit."""
        geometry, add = self.plan.geometry, self.ledger.work
        if geometry.sparse:
            nonzeros = share * self.entries * stored_share(self.plan.spec)
            add("products", self.complex * 4 * nonzeros * block, self.rates.spmm[self.work])
        else:
            add("products", self.complex * 4 * share * self.entries * block, self.rates.products[self.work])
            add("products", self.complex * share * self.entries, self.rates.per_entry[self.work])
        units = geometry.panels * -(-(geometry.lines // geometry.panels) // geometry.unit_lines)
        self.ledger.work("products", self.complex * share * units * geometry.across * block, self.rates.accumulate)

    def _measure(self, panels: float, block: float) -> None:
        """Units multiplied again, both products in double and the second once more in single."""
        if self.work == "double":
            return
        geometry = self.plan.geometry
        # Counted as whole units, lest plans of low panels be preferred for measuring less.
        entries = panels * min(geometry.unit_lines, geometry.lines) * geometry.across
        if geometry.sparse:
            # Values turned once more, both products in double.
            nonzeros = entries * stored_share(self.plan.spec)
            self.ledger.work("products", nonzeros, self.rates.turn)
            self.ledger.work("products", self.complex * 4 * nonzeros * block, self.rates.spmm["double"])
            return
        # Two wide copies, in memory that is new each time, take as long as six conversions.
        self.ledger.work("products", 6 * entries, self.rates.convert["double"])
        for work, flops in (("double", 4), ("single", 2)):
            self.ledger.work("products", self.complex * flops * entries * block, self.rates.products[work])

    def _basis(self, flops: float) -> None:
        """Dense steps of the caller on the basis."""
        self.ledger.wait("dense", self.rates.basis.seconds(self.complex * flops))

    def _pilot(self) -> None:
        """Read the sample and solve it."""
        plan, n = self.plan, self.plan.geometry.across
        share = len(plan.pilot_panels) / max(1, plan.geometry.panels)
        if not plan.pilot_panels:
            return
        self.read(share)
        if plan.mean_only:
            return
        start = plan.widths.start
        self.convert(share, "double", energies=True, sums=True)
        for product in range(PILOT_PRODUCTS):
            self.convert(share, self.work, energies=product == PILOT_PRODUCTS - 1, sums=False)
            self.products(share, start)
        self._measure(min(MEASURED_IN_PILOT, len(plan.pilot_panels)), start)
        self.ledger.wait("dense", (PILOT_PRODUCTS + 1) * self.rates.sweep_seconds)
        # Three rounds of 4·n·L² each, for the Gaussian start and after every product; as much again is moved about.
        self._basis(16.0 * PILOT_PRODUCTS * n * start**2)

    def _count_missing(self, size: int) -> None:
        """Read the whole matrix once before the run."""
        before = dict(self.ledger.spent)
        share = size / self.plan.spec.decoded_bytes
        self.read(share)
        self.ledger.work("convert", share * self.entries, self.rates.statistics)
        for phase in ("read", "convert"):
            self.ledger.spent["start"] += (self.ledger.spent[phase] - before[phase]) / self.plan.workers
            self.ledger.spent[phase] = before[phase]

    def _whole_spectrum(self) -> None:
        """One sweep for AᴴA or R, and its decomposition."""
        plan, n = self.plan, float(self.plan.geometry.across)
        self.read(1.0)
        self.convert(1.0, "double", energies=True, sums=True, twice=False)
        flops = self.complex * plan.geometry.lines * n * n
        if plan.route == "gram":
            self.ledger.work("products", flops, self.rates.gram)
        else:
            self.ledger.work("fold", 2 * flops, self.rates.qr)
        square = self.rates.eigen if plan.route == "gram" else self.rates.svd
        self.ledger.wait("dense", square.seconds(self.complex * n**3))
        self.ledger.wait("waiting", self.rates.sweep_seconds)

    def _basis_sweep(self, share: float, block: float, stored: float, *, first: bool) -> None:
        """Multiply a block, fold it upon the earlier columns, and take the next step."""
        plan, rates, add = self.plan, self.rates, self.ledger.work
        m, n = float(plan.geometry.lines), float(plan.geometry.across)
        if first or not plan.resident:
            self.read(share)
        self.convert(share, self.work, energies=first, sums=first)
        self.products(share, block)
        self._measure(share * min(MEASURED_PANELS, plan.geometry.panels), block)
        width = min(stored, max(0.0, plan.widths.limit - block))
        add("fold", self.complex * FOLD_FLOPS * share * m * (width + block) ** 2, rates.fold)
        add("fold", self.complex * 2 * share * m * stored * width, rates.products["double"])
        entry = 16 if self.complex > 1 else 8
        add("scratch", share * m * block * entry, rates.scratch_write)
        add("scratch", share * m * stored * entry, rates.scratch_read)
        full = width + block
        self._basis(share * n * (8 * full**2 + 24 * full * block + 16 * block**2))
        self.ledger.wait("dense", rates.svd.seconds(self.complex * share * full**3))
        self.ledger.wait("waiting", share * rates.sweep_seconds)

    def _slices(self) -> None:
        """Small rectangles of the file, decomposed twice; they grow by whole chunks."""
        spec, axis = self.plan.spec, self.plan.geometry.axis
        chunk = (min(spec.chunks[axis], spec.shape[axis]), min(spec.chunks[1 - axis], spec.shape[1 - axis]))
        allowed = SLICE_SHARE * self.entries
        count = min(MOST_SLICES, int(allowed // (chunk[0] * chunk[1])))
        if not count:
            return
        entries = min(allowed / count, SLICE_ENTRIES)
        across = min(max(chunk[1], (entries / 3) ** 0.5), self.plan.geometry.across)
        lines = min(max(chunk[0], entries / across), self.plan.geometry.lines)
        # Slices are cut down to no wider than long, or than a restart needs, and to these flops.
        across = min(across, max(lines, SLICE_ACROSS))
        flops = min(SLICE_FLOPS, max(lines, across) * min(lines, across) ** 2)
        self.ledger.wait("slices", count * (self.rates.slice_seconds + self.rates.slice.seconds(self.complex * flops)))

    def _store(self, stored: float) -> None:
        """Left vectors from scratch, twice; the result written, and read back."""
        plan, rates, rank = self.plan, self.rates, self.plan.rank
        m, n = float(plan.geometry.lines), float(plan.geometry.across)
        entry = 16 if self.complex > 1 else 8
        width = min(stored, plan.widths.limit)
        seconds = rates.store_seconds + rates.store.seconds((m + n) * rank * entry)
        seconds += 2 * rates.scratch_read.seconds(m * stored * entry)
        seconds += 2 * rates.products["double"].seconds(self.complex * 2 * m * (stored * width + 2 * width * rank))
        self.ledger.wait("store", seconds)


def chunk_bytes(spec: MatrixSpec) -> int:
    """Decoded bytes of a chunk."""
    return spec.chunks[0] * spec.chunks[1] * spec.dtype.itemsize


def padding(spec: MatrixSpec) -> float:
    """Entries of all chunks over those of the matrix."""
    factor = 1.0
    for side, chunk in zip(spec.shape, spec.chunks, strict=True):
        factor *= -(-side // chunk) * chunk / side
    return factor


def _blocks(plan: Plan, sweeps: float, columns: float | None) -> Sequence[tuple[float, float]]:
    """(share of a sweep, columns) of every basis sweep; the last may be part of one."""
    whole = int(sweeps)
    shares = [1.0] * whole + [sweeps - whole] * (sweeps > whole)
    if columns is not None:
        return [(share, columns / sweeps) for share in shares]
    widths = plan.widths
    first = widths.start + (widths.test if plan.route == "krylov" else 0)
    return [(share, float(widths.grow + 2 * widths.test if number else first)) for number, share in enumerate(shares)]

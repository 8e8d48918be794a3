"""Makes the demo scenario's data: a regional parcel network, one Parquet file per relation of `schema.sql`.

    python assets/demo/generate.py --out build/demo --scale 1 --seed 1

The same scale and seed give the same rows in the same order. `scale` multiplies merchants, customers, parcels and all
that hangs on parcels; depots, routes and the rest of the network stay as they are. README.md lists the facts that are
planted in the data.
"""

from __future__ import annotations

import argparse
import math
import os
import shutil
import tempfile
from collections.abc import Mapping, Sequence
from itertools import pairwise
from pathlib import Path
from typing import Any, NamedTuple

import duckdb
import numpy as np
from numpy.typing import NDArray

Column = NDArray[np.generic]
Integers = NDArray[np.int64]
Reals = NDArray[np.float64]

SECOND = 1_000_000
DAY = 86_400 * SECOND
FIRST = 20_458 * DAY  # Monday, 5 January 2026, in microseconds since 1970
DAYS = 180
FIRST_DAY = "2026-01-05"
SNAPSHOT = FIRST + DAYS * DAY  # what happens later is not in the data

REGIONS = ("north", "east", "south", "west", "coast", "highland")
DEPOTS = 72
HEAVY_DEPOT = 17
HEAVY_DEPOT_SHARE = 0.24
HEAVY_MERCHANT_SHARE = 0.22
ROUTES = 180
DRIVERS = 320
PERMITS = ("van", "truck", "chilled", "hazard", "night")
PERMIT_MONTHS = (0, 60, 24, 12, 36)  # 0: for ever
# day of the period, region (0: everywhere), label
HOLIDAYS = (
    (1, 0, "lamp day"), (47, 0, "thaw day"), (88, 0, "sowing day"), (116, 0, "tool day"),
    (30, 1, "north fair"), (61, 2, "east fair"), (75, 3, "south fair"), (96, 4, "west fair"),
    (131, 5, "tide feast"), (150, 6, "herding feast"), (151, 6, "herding feast"), (166, 0, "long day"),
)  # fmt: skip
BANDS = (0.0, 0.1, 0.25, 0.5, 1.0, 2.0, 5.0, 10.0, 20.0, 50.0, 100.0, 200.0, 1000.0)
PERIODS = ("2026-01-01", "2026-03-01", "2026-05-01", "2027-01-01")
CHUNK = 200_000  # parcels made at a time: so memory hardly grows with the scale

SCHEMA = Path(__file__).with_name("schema.sql")
RELATIONS = (
    "regions", "depots", "merchants", "customers", "services", "tariffs", "holidays", "vehicles", "drivers", "permits",
    "driver_permits", "routes", "route_permits", "route_runs", "parcels", "scans", "notices", "claims", "notice_feed",
)  # fmt: skip


class Service(NamedTuple):
    """A class of service: days promised, weights (kg), the spread of their logarithm, the share of parcels."""

    name: str
    days: int
    heaviest: float
    middle: float
    spread: float
    share: float


SERVICES = (
    Service("letter", 4, 2.0, 0.25, 0.6, 0.22),
    Service("standard", 3, 20.0, 3.5, 0.7, 0.50),
    Service("express", 1, 10.0, 1.8, 0.7, 0.20),
    Service("freight", 6, 400.0, 80.0, 0.6, 0.08),
)


def generate(folder: Path, scale: float = 1.0, seed: int = 1) -> None:
    """Writes `<relation>.parquet` for every relation into `folder`.

    Files appear only when all of them are complete; files of these names that were there are replaced. Raises
    `ValueError` for a scale that is not a positive number or a negative seed.
    """
    if not (math.isfinite(scale) and scale > 0):
        raise ValueError(f"the scale must be a positive number, not {scale}")
    if seed < 0:
        raise ValueError(f"the seed must not be negative, not {seed}")
    folder = Path(folder)
    folder.parent.mkdir(parents=True, exist_ok=True)
    making = Path(tempfile.mkdtemp(prefix=f".{folder.name}-", dir=folder.parent))
    try:
        with duckdb.connect(config={"threads": 1}) as connection:
            _write_all(Writer(connection, making), Plan.of(scale, seed))
        if not folder.exists():
            making.chmod(0o755)
            making.rename(folder)
            return
        for name in RELATIONS:
            os.replace(making / f"{name}.parquet", folder / f"{name}.parquet")
    finally:
        shutil.rmtree(making, ignore_errors=True)


class Plan(NamedTuple):
    """How many of what, and who gets how much."""

    seed: int
    parcels: int
    customers: int
    merchants: int
    depot_weights: Reals
    merchant_weights: Reals
    vehicle_counts: Integers

    @classmethod
    def of(cls, scale: float, seed: int) -> Plan:
        rng = np.random.default_rng([seed, 0])
        merchants = max(40, round(600 * scale))
        depots = _zipf(DEPOTS, 0.7)
        rng.shuffle(depots)
        depots = _with_share(depots, HEAVY_DEPOT - 1, HEAVY_DEPOT_SHARE)
        return cls(
            seed=seed,
            parcels=max(500, round(40_000 * scale)),
            customers=max(200, round(12_000 * scale)),
            merchants=merchants,
            depot_weights=depots,
            merchant_weights=_with_share(_zipf(merchants, 0.9), 0, HEAVY_MERCHANT_SHARE),
            vehicle_counts=np.where(np.arange(DEPOTS) == HEAVY_DEPOT - 1, 24, 3).astype(np.int64),
        )

    def stream(self, *place: int) -> np.random.Generator:
        """A stream of random numbers of its own for every part, so that one part's change leaves the others alone."""
        return np.random.default_rng([self.seed, *place])


def _zipf(count: int, exponent: float) -> Reals:
    weights = np.power(np.arange(1, count + 1, dtype=np.float64), -exponent)
    return np.asarray(weights / weights.sum(), dtype=np.float64)


def _with_share(weights: Reals, place: int, share: float) -> Reals:
    """The weights with one of them raised or lowered to a share of the whole."""
    others = weights.copy()
    others[place] = 0.0
    others *= (1.0 - share) / others.sum()
    others[place] = share
    return others


def _pick(rng: np.random.Generator, weights: Reals, count: int) -> Integers:
    """Places 0.. drawn by weight."""
    return np.searchsorted(np.cumsum(weights)[:-1], rng.random(count), side="right").astype(np.int64)


def _nulls(values: NDArray[Any], where: NDArray[np.bool_]) -> Column:
    return np.ma.masked_array(values, where)


def _moments(values: Integers, where: NDArray[np.bool_] | None = None) -> Column:
    """Microseconds as timestamps of whole seconds."""
    moments = (values // SECOND * SECOND).astype("datetime64[us]")
    return moments if where is None else np.where(where, np.datetime64("NaT"), moments)


class Writer:
    """Parquet files with the attributes and types of `schema.sql`; parts of a relation are put together at the end."""

    def __init__(self, connection: duckdb.DuckDBPyConnection, folder: Path) -> None:
        self.connection = connection
        self.folder = folder
        self.parts: dict[str, int] = {}
        connection.execute(SCHEMA.read_text(encoding="utf-8"))

    def write(self, name: str, columns: Mapping[str, Column], /, **made: str) -> None:
        """Appends rows to a relation. Its attributes are the columns of their names, or SQL over the columns."""
        part = self.parts.get(name, 0)
        self.connection.register("given", dict(columns))
        attributes = self.connection.execute(f"describe {name}").fetchall()
        listed = ", ".join(f"cast({made.get(a, a)} as {type_}) as {a}" for a, type_, *_ in attributes)
        self._copy(f"select {listed} from given", f"{name}.{part}")
        self.connection.unregister("given")
        self.parts[name] = part + 1

    def join_parts(self) -> None:
        for name, count in self.parts.items():
            files = [self.folder / f"{name}.{part}.parquet" for part in range(count)]
            if count == 1:
                files[0].rename(self.folder / f"{name}.parquet")
                continue
            listed = ", ".join(_quoted(str(file)) for file in files)
            self._copy(f"select * from read_parquet([{listed}])", name)
            for file in files:
                file.unlink()

    def _copy(self, select: str, stem: str) -> None:
        target = _quoted(str(self.folder / f"{stem}.parquet"))
        self.connection.execute(f"copy ({select}) to {target} (format parquet, compression zstd)")


def _quoted(text: str) -> str:
    return "'" + text.replace("'", "''") + "'"


def _label(labels: Sequence[str], column: str) -> str:
    """SQL for the label at a place that counts from 1."""
    return f"[{', '.join(_quoted(label) for label in labels)}][{column}]"


def _day(first: str, column: str) -> str:
    """SQL for the date so many days after the first."""
    return f"date '{first}' + {column}::integer"


def _write_all(writer: Writer, plan: Plan) -> None:
    _write_network(writer)
    _write_people(writer, plan)
    _write_fleet(writer, plan)
    _write_routes(writer, plan)
    first = {"scans": 1, "notices": 1, "claims": 1}
    for chunk, low in enumerate(range(0, plan.parcels, CHUNK)):
        parcels = _parcels(plan, chunk, low, min(low + CHUNK, plan.parcels))
        _write_parcels(writer, parcels)
        first["scans"] += _write_scans(writer, plan, chunk, parcels, first["scans"])
        first["notices"] += _write_notices(writer, plan, chunk, parcels, first["notices"])
        first["claims"] += _write_claims(writer, plan, chunk, parcels, first["claims"])
    writer.join_parts()


# The network --------------------------------------------------------------------------------------------------------


def _region_of(depot: Integers) -> Integers:
    """Region 1..6 of depot 1..72: they take turns."""
    return (depot - 1) % len(REGIONS) + 1


def _hub_of(depot: Integers) -> Integers:
    """The depot above, of the same region; the six regional hubs hang on depot 1; 0 above the root."""
    upper = len(REGIONS) * 4
    above = np.where(depot > upper, len(REGIONS) + 1 + (depot - upper - 1) % (upper - len(REGIONS)), _region_of(depot))
    return np.where(depot <= len(REGIONS), np.where(depot == 1, 0, 1), above)


def _write_network(writer: Writer) -> None:
    regions = np.arange(1, len(REGIONS) + 1)
    writer.write("regions", {"region_id": regions}, name=_label(REGIONS, "region_id"))
    depots = np.arange(1, DEPOTS + 1)
    hubs = _hub_of(depots)
    writer.write(
        "depots",
        {
            "depot_id": depots,
            "region_id": _region_of(depots),
            "hub_id": _nulls(hubs, hubs == 0),
            "docks": np.where(depots == HEAVY_DEPOT, 60, 4 + depots * 7 % 9),
            "opened": depots * 97 % 5000,
        },
        code=_label(REGIONS, "region_id") + " || '-' || lpad(depot_id::varchar, 2, '0')",
        opened_on=_day("2004-03-01", "opened"),
    )
    writer.write(
        "services",
        {
            "place": np.arange(1, len(SERVICES) + 1),
            "promise_days": np.array([service.days for service in SERVICES]),
            "max_weight_kg": np.array([service.heaviest for service in SERVICES]),
        },
        service=_label([service.name for service in SERVICES], "place"),
    )
    tariffs = [
        (low, high, begin, end, (2.2 + high**0.62) * (1 + 0.04 * period))
        for period, (begin, end) in enumerate(pairwise(PERIODS))
        for low, high in pairwise(BANDS)
    ]
    names = ("weight_from", "weight_to", "valid_from", "valid_to", "price")
    columns = {name: np.array(values) for name, values in zip(names, zip(*tariffs, strict=True), strict=True)}
    for name in ("valid_from", "valid_to"):
        columns[name] = columns[name].astype("datetime64[us]")
    writer.write("tariffs", {"tariff_id": np.arange(1, len(tariffs) + 1), **columns})
    days, wheres, labels = zip(*HOLIDAYS, strict=True)
    places = np.arange(1, len(HOLIDAYS) + 1)
    writer.write(
        "holidays",
        {"holiday_id": places, "after": np.array(days), "region_id": _nulls(np.array(wheres), np.array(wheres) == 0)},
        day=_day(FIRST_DAY, "after"),
        label=_label(labels, "holiday_id"),
    )
    months = np.array(PERMIT_MONTHS)
    places = np.arange(1, len(PERMITS) + 1)
    writer.write(
        "permits", {"place": places, "months_valid": _nulls(months, months == 0)}, permit=_label(PERMITS, "place")
    )


def _write_people(writer: Writer, plan: Plan) -> None:
    rng = plan.stream(1)
    count = plan.merchants
    rank = np.arange(count) / count
    writer.write(
        "merchants",
        {
            "merchant_id": np.arange(1, count + 1),
            "region_id": rng.integers(1, len(REGIONS) + 1, count),
            "tier": np.where(rank < 0.05, 3, np.where(rank < 0.3, 2, 1)),
            "credit_limit": _nulls(rng.integers(2, 200, count) * 500, rng.random(count) < 0.3),
            "joined": rng.integers(0, 3000, count),
        },
        code="'m-' || lpad(merchant_id::varchar, 6, '0')",
        tier=_label(("basic", "plus", "prime"), "tier"),
        joined_on=_day("2017-01-01", "joined"),
    )
    rng = plan.stream(2)
    count = plan.customers
    places = np.arange(count)
    customers = _customer_id(plan, places)
    order = np.argsort(customers)
    depots = _customer_depot(plan, places)[order] + 1
    writer.write(
        "customers",
        {
            "customer_id": customers[order],
            "region_id": _region_of(depots),
            "home_depot_id": _nulls(depots, rng.random(count) < 0.15),
            "doorstep": rng.random(count) < 0.35,
            "joined": rng.integers(0, 3200, count),
        },
        since=_day("2017-01-01", "joined"),
    )


def _customer_depot(plan: Plan, place: Integers) -> Integers:
    """The depot (0..) that serves the customer at a place: places stand depot by depot, as many as its weight asks."""
    bounds = np.cumsum(plan.depot_weights)[:-1]
    return np.searchsorted(bounds, (place + 0.5) / plan.customers, side="right").astype(np.int64)


def _customer_id(plan: Plan, place: Integers) -> Integers:
    """Numbers that say nothing of the place: a walk through all of them by a step without a common divisor."""
    step = next(step for step in range(7_919, 20_000) if math.gcd(step, plan.customers) == 1)
    return place * step % plan.customers + 1


def _write_fleet(writer: Writer, plan: Plan) -> None:
    rng = plan.stream(3)
    depots = np.repeat(np.arange(1, DEPOTS + 1), plan.vehicle_counts)
    count = len(depots)
    writer.write(
        "vehicles",
        {
            "vehicle_id": np.arange(1, count + 1),
            "depot_id": depots,
            "capacity_kg": rng.choice(np.array([900, 1400, 3500, 7500]), count, p=[0.4, 0.35, 0.2, 0.05]),
            "bought": rng.integers(0, 2400, count),
            "retired": _nulls(rng.integers(2500, 3400, count), rng.random(count) < 0.85),
        },
        plate="'v' || lpad((vehicle_id * 7919 % 9973)::varchar, 4, '0')",
        bought_on=_day("2016-05-01", "bought"),
        retired_on=_day("2016-05-01", "retired"),
    )
    rng = plan.stream(4)
    drivers = np.arange(1, DRIVERS + 1)
    mentors = (rng.random(DRIVERS) * (drivers - 1)).astype(np.int64) + 1
    writer.write(
        "drivers",
        {
            "driver_id": drivers,
            "depot_id": _driver_depot(),
            "mentor_id": _nulls(mentors, (rng.random(DRIVERS) < 0.35) | (mentors >= drivers)),
            "hired": np.sort(rng.integers(0, 5000, DRIVERS)),
        },
        badge="'d-' || lpad(driver_id::varchar, 4, '0')",
        hired_on=_day("2012-01-01", "hired"),
    )
    # Every tenth driver holds all permits; the others hold the first and each further one by chance.
    held = rng.random((DRIVERS, len(PERMITS))) < np.array([1.0, 0.55, 0.35, 0.2, 0.45])
    held[drivers % 10 == 0] = True
    driver, permit = np.nonzero(held)
    writer.write(
        "driver_permits",
        {"driver_id": driver + 1, "permit": permit + 1, "issued": rng.integers(0, 1500, len(driver))},
        permit=_label(PERMITS, "permit"),
        issued_on=_day("2021-06-01", "issued"),
    )


def _driver_depot() -> Integers:
    """The depot of each driver: every depot has three, and the heavy one all that are left."""
    depots = np.repeat(np.arange(1, DEPOTS + 1), 3)
    return np.concatenate([depots, np.full(DRIVERS - len(depots), HEAVY_DEPOT)])


def _write_routes(writer: Writer, plan: Plan) -> None:
    rng = plan.stream(5)
    depots = np.concatenate([np.repeat(np.arange(1, DEPOTS + 1), 2), np.full(ROUTES - 2 * DEPOTS, HEAVY_DEPOT)])
    routes = np.arange(1, ROUTES + 1)
    writer.write("routes", {"route_id": routes, "depot_id": depots, "km": rng.integers(18, 160, ROUTES)})
    needed = rng.random((ROUTES, len(PERMITS))) < np.array([1.0, 0.4, 0.25, 0.1, 0.3])
    route, permit = np.nonzero(needed)
    writer.write("route_permits", {"route_id": route + 1, "permit": permit + 1}, permit=_label(PERMITS, "permit"))
    # Six days a week, not on holidays of the region; each run takes a driver and, mostly, a vehicle of its depot.
    day, place = (grid.ravel() for grid in np.meshgrid(np.arange(DAYS), np.arange(ROUTES), indexing="ij"))
    closed = day % 7 == 6
    for holiday, region, _ in HOLIDAYS:
        closed |= (day == holiday) & ((region == 0) | (_region_of(depots[place]) == region))
    day, place = day[~closed], place[~closed]
    depot = depots[place]
    by_depot = np.argsort(_driver_depot(), kind="stable") + 1
    crews = np.bincount(_driver_depot(), minlength=DEPOTS + 1)[1:]
    writer.write(
        "route_runs",
        {
            "run_id": np.arange(1, len(day) + 1),
            "route_id": routes[place],
            "after": day,
            "driver_id": by_depot[_one_of(rng, crews, depot - 1)],
            "vehicle_id": _nulls(_one_of(rng, plan.vehicle_counts, depot - 1) + 1, rng.random(len(day)) < 0.1),
            "stops": rng.poisson(np.where(depot == HEAVY_DEPOT, 42, 24)),
        },
        day=_day(FIRST_DAY, "after"),
    )


def _one_of(rng: np.random.Generator, counts: Integers, group: Integers) -> Integers:
    """For each group a member's place, where members stand group by group."""
    starts = np.cumsum(counts) - counts
    return starts[group] + (rng.random(len(group)) * counts[group]).astype(np.int64)


# Parcels and what happens to them -----------------------------------------------------------------------------------


class Parcels(NamedTuple):
    """The parcels of one chunk. Times in microseconds since 1970; `depot` and `merchant` count from 1."""

    number: Integers
    depot: Integers
    merchant: Integers
    customer: Integers  # 0: none
    service: Integers  # place in SERVICES
    weight: Reals
    value: Reals  # NaN: not declared
    posted: Integers
    promised: Integers
    delivered: Integers  # SNAPSHOT where not delivered
    open: NDArray[np.bool_]
    late: NDArray[np.bool_]
    delay: Reals  # days after the promise, 0 where on time

    @property
    def size(self) -> int:
        return len(self.number)


def _parcels(plan: Plan, chunk: int, low: int, high: int) -> Parcels:
    rng = plan.stream(6, chunk)
    count = high - low
    # Chunks follow one another in time, so that numbers rise with the time of posting at every scale.
    quantile = (low + np.sort(rng.random(count)) * count) / plan.parcels
    day = np.floor(quantile * DAYS).astype(np.int64)
    posted = FIRST + day * DAY + ((7 + 13 * (quantile * DAYS - day)) * 3600).astype(np.int64) * SECOND
    depot = _pick(rng, plan.depot_weights, count)
    merchant = _pick(rng, plan.merchant_weights, count)
    service = _pick(rng, np.array([service.share for service in SERVICES]), count)
    service = np.where((merchant == 0) & (rng.random(count) < 0.6), 1, service)  # the heavy merchant sends standard
    days = np.array([service.days for service in SERVICES])[service]
    heaviest = np.array([service.heaviest for service in SERVICES])[service]
    middle = np.array([service.middle for service in SERVICES])[service]
    spread = np.array([service.spread for service in SERVICES])[service]
    weight = np.clip(middle * np.exp(rng.normal(0, 1, count) * spread), 0.05, heaviest)
    promised = FIRST + (day + days.astype(np.int64)) * DAY + np.where(service == 2, 12, 18) * 3600 * SECOND
    region = _region_of(depot + 1)
    feast = np.zeros(count, dtype=bool)
    for holiday, where, _ in HOLIDAYS:
        feast |= (day <= holiday) & (holiday <= day + days) & ((where == 0) | (region == where))
    chance = 0.045 + 0.05 * (service == 2) + 0.07 * (depot == HEAVY_DEPOT - 1) + 0.1 * feast
    late = rng.random(count) < chance
    delay = np.where(late, np.minimum(0.04 + rng.exponential(1.8, count), 14), 0)
    early = 0.3 + 0.69 * rng.beta(3, 2, count)
    delivered = np.where(late, promised + (delay * DAY).astype(np.int64),
                         posted + ((promised - posted) * early).astype(np.int64))  # fmt: skip
    open_ = (rng.random(count) < 0.015) | (delivered >= SNAPSHOT)
    return Parcels(
        number=np.arange(low + 1, high + 1),
        depot=depot + 1,
        merchant=merchant + 1,
        customer=np.where(rng.random(count) < 0.06, 0, _customers(rng, plan, depot)),
        service=service,
        weight=weight,
        value=np.where(rng.random(count) < 0.4, np.nan, np.round(5 + weight * 3 + rng.exponential(60, count), 2)),
        posted=posted,
        promised=promised,
        delivered=np.where(open_, SNAPSHOT, delivered),
        open=open_,
        late=late & ~open_,
        delay=np.where(open_, 0, delay),
    )


def _customers(rng: np.random.Generator, plan: Plan, depot: Integers) -> Integers:
    """A customer of the delivering depot, some of them far more often than others; one in thirty is from elsewhere."""
    served = np.bincount(_customer_depot(plan, np.arange(plan.customers)), minlength=DEPOTS)
    starts = np.cumsum(served) - served
    place = starts[depot] + (rng.random(len(depot)) ** 2.5 * served[depot]).astype(np.int64)
    anywhere = rng.integers(0, plan.customers, len(depot))
    elsewhere = (rng.random(len(depot)) < 1 / 30) | (served[depot] == 0)
    return _customer_id(plan, np.where(elsewhere, anywhere, place))


def _write_parcels(writer: Writer, parcels: Parcels) -> None:
    writer.write(
        "parcels",
        {
            "parcel_id": parcels.number,
            "depot_id": parcels.depot,
            "merchant_id": parcels.merchant,
            "customer_id": _nulls(parcels.customer, parcels.customer == 0),
            "service": parcels.service + 1,
            "weight_kg": parcels.weight,
            "declared_value": _nulls(parcels.value, np.isnan(parcels.value)),
            "posted_at": _moments(parcels.posted),
            "promised_at": _moments(parcels.promised),
            "delivered_at": _moments(parcels.delivered, parcels.open),
        },
        barcode="'p' || lpad((parcel_id * 7)::varchar, 10, '0') || parcel_id * 7 % 9",
        service=_label([service.name for service in SERVICES], "service"),
    )


def _events(counts: Integers) -> tuple[Integers, Integers]:
    """For parcels with so many events each: the events' parcels (places), and each event's place among its parcel's."""
    parcel = np.repeat(np.arange(len(counts)), counts)
    return parcel, np.arange(len(parcel)) - np.repeat(np.cumsum(counts) - counts, counts)


def _last(parcels: Parcels) -> Integers:
    """When the story of a parcel ends: at its delivery, or ten days after posting."""
    return np.where(parcels.open, np.minimum(parcels.posted + 10 * DAY, SNAPSHOT), parcels.delivered)


def _write_scans(writer: Writer, plan: Plan, chunk: int, parcels: Parcels, first: int) -> int:
    rng = plan.stream(7, chunk)
    size = parcels.size
    counts = np.where(parcels.late, 8 + rng.poisson(3.2 + 1.7 * parcels.delay), 4 + rng.poisson(3, size))
    counts = np.where(rng.random(size) < np.where(parcels.late, 0.01, 0.005), 0, counts)  # labels nobody can read
    parcel, place = _events(counts)
    of = counts[parcel]
    span = (_last(parcels) - parcels.posted)[parcel]
    share = (place + rng.random(len(parcel)) * (place < of - 1)) / (of - 1)
    at = np.minimum(parcels.posted[parcel] + (span * share).astype(np.int64), _last(parcels)[parcel])
    near = place * 3 >= of * 2
    depot = np.where(
        place * 3 < of,
        _pick(rng, plan.depot_weights, size)[parcel] + 1,
        np.where(near, parcels.depot[parcel], np.maximum(_hub_of(parcels.depot), 1)[parcel]),
    )
    kind = np.where(rng.random(len(parcel)) < np.where(parcels.late[parcel] & near, 0.5, 0.04), 4,
                    2 + (rng.random(len(parcel)) < 0.3))  # fmt: skip
    kind = np.where(place == 0, 1, np.where((place == of - 1) & ~parcels.open[parcel], 5, kind))
    carried = (kind >= 3) & (rng.random(len(parcel)) < 0.92)
    writer.write(
        "scans",
        {
            "scan_id": first + np.arange(len(parcel)),
            "parcel_id": parcels.number[parcel],
            "depot_id": depot,
            "vehicle_id": _nulls(_one_of(rng, plan.vehicle_counts, depot - 1) + 1, ~carried),
            "kind": kind,
            "scanned_at": _moments(at),
        },
        kind=_label(("accepted", "sorted", "loaded", "attempted", "delivered"), "kind"),
    )
    return len(parcel)


def _write_notices(writer: Writer, plan: Plan, chunk: int, parcels: Parcels, first: int) -> int:
    rng = plan.stream(8, chunk)
    size = parcels.size
    counts = np.where(parcels.late, 4 + rng.poisson(3 + 1.95 * parcels.delay), rng.poisson(1.6, size))
    counts = np.where(parcels.late & (rng.random(size) < 0.03), 0, counts)  # no address to write to
    parcel, place = _events(counts)
    general = round(len(parcel) * 0.02)
    count = len(parcel) + general
    span = (_last(parcels) - parcels.posted)[parcel]
    sent = np.concatenate([
        parcels.posted[parcel] + (span * rng.random(len(parcel))).astype(np.int64),
        rng.integers(parcels.posted[0], parcels.posted[-1] + 1, general),
    ])  # fmt: skip
    number = np.concatenate([parcels.number[parcel], np.zeros(general, dtype=np.int64)])
    bad = parcels.late[parcel] & (rng.random(len(parcel)) < 0.7)
    reason = np.where(bad, np.where(rng.random(len(parcel)) < 0.6, 3, 4), np.where(place == 0, 1, 2))
    reason = np.concatenate([reason, np.full(general, 5)])
    channel = _pick(rng, np.array([0.45, 0.25, 0.25, 0.05]), count) + 1
    order = np.argsort(sent, kind="stable")
    notices: dict[str, Column] = {
        "notice_id": first + np.arange(count),
        "parcel_id": _nulls(number[order], number[order] == 0),
        "channel": channel[order],
        "reason": reason[order],
        "sent_at": _moments(sent[order]),
    }
    channels = _label(("app", "text", "mail", "paper"), "channel")
    reasons = _label(("posted", "arriving", "delayed", "missed", "general"), "reason")
    writer.write("notices", notices, channel=channels, reason=reasons)
    # The carriers answer for half of what goes by text and mail; one answer in twelve comes two to four times.
    answered = np.isin(notices["channel"], (2, 3)) & (rng.random(count) < 0.5)
    times = np.where(rng.random(count) < 1 / 12, rng.integers(2, 5, count), 1) * answered
    row = np.repeat(np.arange(count), times)
    writer.write(
        "notice_feed",
        {
            "parcel": notices["parcel_id"][row],
            "wrong": np.repeat(rng.random(count) < 0.005, times),
            "channel": notices["channel"][row],
            "answer": np.repeat(_pick(rng, np.array([0.82, 0.07, 0.11]), count) + 1, times),
            "sent": notices["sent_at"][row],
        },
        parcel_ref="case when wrong then '?' else parcel::varchar end",
        channel=channels,
        answer=_label(("taken", "bounced", "read"), "answer"),
        received_at="sent + interval 7 seconds",
    )
    return count


def _write_claims(writer: Writer, plan: Plan, chunk: int, parcels: Parcels, first: int) -> int:
    rng = plan.stream(9, chunk)
    size = parcels.size
    lost = parcels.open & (parcels.promised < SNAPSHOT - 14 * DAY)
    claimed = rng.random(size) < np.where(lost, 0.6, np.where(parcels.late, 0.25, 0.004))
    counts = np.where(claimed, 1 + (rng.random(size) < 0.06), 0)
    parcel, _ = _events(counts)
    opened = np.minimum(_last(parcels)[parcel] // DAY + rng.integers(1, 9, len(parcel)), SNAPSHOT // DAY)
    worth = np.nan_to_num(parcels.value, nan=30.0)[parcel]
    amount: Reals = np.round(4 + worth * (0.2 + 0.8 * rng.random(len(parcel))), 2)
    writer.write(
        "claims",
        {
            "claim_id": first + np.arange(len(parcel)),
            "parcel_id": parcels.number[parcel],
            "reason": np.where(lost[parcel], 2, np.where(parcels.late[parcel] & (rng.random(len(parcel)) < 0.9), 1, 3)),
            "amount": _nulls(amount, rng.random(len(parcel)) < 0.2),
            "opened": opened,
            "settled": _nulls(opened + rng.integers(0, 30, len(parcel)), rng.random(len(parcel)) < 0.35),
        },
        reason=_label(("late", "lost", "damaged"), "reason"),
        opened_on=_day("1970-01-01", "opened"),
        settled_on=_day("1970-01-01", "settled"),
    )
    return len(parcel)


def _arguments() -> argparse.Namespace:
    parser = argparse.ArgumentParser(description="Makes the demo scenario's data, one Parquet file per relation.")
    parser.add_argument("--out", type=Path, required=True, metavar="FOLDER", help="where the files go")
    parser.add_argument("--scale", type=float, default=1.0, help="how many times the small data (default: 1)")
    parser.add_argument("--seed", type=int, default=1, help="what the random numbers start from (default: 1)")
    return parser.parse_args()


def main() -> None:
    arguments = _arguments()
    try:
        generate(arguments.out, arguments.scale, arguments.seed)
    except (ValueError, OSError) as error:
        raise SystemExit(f"the demo data was not made: {error}") from error


if __name__ == "__main__":
    main()

-- The demo scenario: a regional parcel network. DuckDB syntax; every constraint holds on the generated data.

create table regions (
    region_id integer not null primary key,
    name varchar not null unique
);

-- Depots form a tree: a depot's hub is the depot it is fed from; the root has none.
create table depots (
    depot_id integer not null primary key,
    code varchar not null unique,
    region_id integer not null references regions (region_id),
    hub_id integer references depots (depot_id),
    docks integer not null check (docks > 0),
    opened_on date not null
);

create table merchants (
    merchant_id integer not null primary key,
    code varchar not null unique,
    region_id integer not null references regions (region_id),
    tier varchar not null check (tier in ('basic', 'plus', 'prime')),
    credit_limit decimal(12, 2) check (credit_limit > 0),
    joined_on date not null
);

create table customers (
    customer_id integer not null primary key,
    region_id integer not null references regions (region_id),
    home_depot_id integer references depots (depot_id),
    doorstep boolean not null,
    since date not null
);

create table services (
    service varchar not null primary key,
    promise_days integer not null check (promise_days > 0),
    max_weight_kg decimal(7, 2) not null check (max_weight_kg > 0)
);

-- The bands [weight_from, weight_to) and the periods [valid_from, valid_to) tile: one tariff for a weight and a day.
create table tariffs (
    tariff_id integer not null primary key,
    weight_from decimal(7, 2) not null,
    weight_to decimal(7, 2) not null,
    valid_from date not null,
    valid_to date not null,
    price decimal(9, 2) not null check (price > 0),
    unique (weight_from, valid_from),
    check (weight_from < weight_to),
    check (valid_from < valid_to)
);

-- A holiday without a region is kept everywhere.
create table holidays (
    holiday_id integer not null primary key,
    day date not null,
    region_id integer references regions (region_id),
    label varchar not null
);

create table vehicles (
    vehicle_id integer not null primary key,
    plate varchar not null unique,
    depot_id integer not null references depots (depot_id),
    capacity_kg integer not null check (capacity_kg > 0),
    bought_on date not null,
    retired_on date,
    check (retired_on is null or retired_on > bought_on)
);

create table drivers (
    driver_id integer not null primary key,
    badge varchar not null unique,
    depot_id integer not null references depots (depot_id),
    mentor_id integer references drivers (driver_id),
    hired_on date not null
);

create table permits (
    permit varchar not null primary key,
    months_valid integer check (months_valid > 0)
);

create table driver_permits (
    driver_id integer not null references drivers (driver_id),
    permit varchar not null references permits (permit),
    issued_on date not null,
    primary key (driver_id, permit)
);

create table routes (
    route_id integer not null primary key,
    depot_id integer not null references depots (depot_id),
    km integer not null check (km > 0)
);

create table route_permits (
    route_id integer not null references routes (route_id),
    permit varchar not null references permits (permit),
    primary key (route_id, permit)
);

-- A run without a vehicle was driven with a hired one.
create table route_runs (
    run_id integer not null primary key,
    route_id integer not null references routes (route_id),
    day date not null,
    driver_id integer not null references drivers (driver_id),
    vehicle_id integer references vehicles (vehicle_id),
    stops integer not null check (stops >= 0),
    unique (route_id, day)
);

-- depot_id is the depot that delivers. A parcel without a customer goes to someone who is not registered; one without
-- delivered_at is under way or lost.
create table parcels (
    parcel_id bigint not null primary key,
    barcode varchar not null unique,
    depot_id integer not null references depots (depot_id),
    merchant_id integer not null references merchants (merchant_id),
    customer_id integer references customers (customer_id),
    service varchar not null references services (service),
    weight_kg decimal(7, 2) not null check (weight_kg > 0),
    declared_value decimal(9, 2) check (declared_value >= 0),
    posted_at timestamp not null,
    promised_at timestamp not null,
    delivered_at timestamp,
    check (promised_at > posted_at),
    check (delivered_at is null or delivered_at > posted_at)
);

create table scans (
    scan_id bigint not null primary key,
    parcel_id bigint not null references parcels (parcel_id),
    depot_id integer not null references depots (depot_id),
    vehicle_id integer references vehicles (vehicle_id),
    kind varchar not null check (kind in ('accepted', 'sorted', 'loaded', 'attempted', 'delivered')),
    scanned_at timestamp not null
);

-- A notice without a parcel is an announcement to everybody.
create table notices (
    notice_id bigint not null primary key,
    parcel_id bigint references parcels (parcel_id),
    channel varchar not null check (channel in ('app', 'text', 'mail', 'paper')),
    reason varchar not null check (reason in ('posted', 'arriving', 'delayed', 'missed', 'general')),
    sent_at timestamp not null
);

create table claims (
    claim_id bigint not null primary key,
    parcel_id bigint not null references parcels (parcel_id),
    reason varchar not null check (reason in ('late', 'lost', 'damaged')),
    amount decimal(9, 2) check (amount > 0),
    opened_on date not null,
    settled_on date,
    check (settled_on is null or settled_on >= opened_on)
);

-- What the message carriers answer, as it comes in: no key, repeated deliveries stand several times, and the parcel is
-- named by text that nobody checks.
create table notice_feed (
    parcel_ref varchar,
    channel varchar not null,
    answer varchar not null,
    received_at timestamp not null
);

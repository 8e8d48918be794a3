-- The relations, keys and foreign keys of the TPC-H specification (clause 1.4).
create table region (
    r_regionkey bigint not null primary key, r_name varchar not null, r_comment varchar not null
);
create table nation (
    n_nationkey bigint not null primary key, n_name varchar not null,
    n_regionkey bigint not null references region (r_regionkey), n_comment varchar not null
);
create table part (
    p_partkey bigint not null primary key, p_name varchar not null, p_mfgr varchar not null, p_brand varchar not null,
    p_type varchar not null, p_size integer not null, p_container varchar not null,
    p_retailprice decimal(15, 2) not null, p_comment varchar not null
);
create table supplier (
    s_suppkey bigint not null primary key, s_name varchar not null, s_address varchar not null,
    s_nationkey bigint not null references nation (n_nationkey), s_phone varchar not null,
    s_acctbal decimal(15, 2) not null, s_comment varchar not null
);
create table partsupp (
    ps_partkey bigint not null references part (p_partkey), ps_suppkey bigint not null references supplier (s_suppkey),
    ps_availqty integer not null, ps_supplycost decimal(15, 2) not null, ps_comment varchar not null,
    primary key (ps_partkey, ps_suppkey)
);
create table customer (
    c_custkey bigint not null primary key, c_name varchar not null, c_address varchar not null,
    c_nationkey bigint not null references nation (n_nationkey), c_phone varchar not null,
    c_acctbal decimal(15, 2) not null, c_mktsegment varchar not null, c_comment varchar not null
);
create table orders (
    o_orderkey bigint not null primary key, o_custkey bigint not null references customer (c_custkey),
    o_orderstatus varchar not null, o_totalprice decimal(15, 2) not null, o_orderdate date not null,
    o_orderpriority varchar not null, o_clerk varchar not null, o_shippriority integer not null,
    o_comment varchar not null
);
create table lineitem (
    l_orderkey bigint not null references orders (o_orderkey), l_partkey bigint not null references part (p_partkey),
    l_suppkey bigint not null references supplier (s_suppkey), l_linenumber integer not null,
    l_quantity decimal(15, 2) not null, l_extendedprice decimal(15, 2) not null, l_discount decimal(15, 2) not null,
    l_tax decimal(15, 2) not null, l_returnflag varchar not null, l_linestatus varchar not null,
    l_shipdate date not null, l_commitdate date not null, l_receiptdate date not null,
    l_shipinstruct varchar not null, l_shipmode varchar not null, l_comment varchar not null,
    primary key (l_orderkey, l_linenumber),
    foreign key (l_partkey, l_suppkey) references partsupp (ps_partkey, ps_suppkey)
);

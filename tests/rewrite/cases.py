"""For every rule: queries over the schema of `tests.generate.queries` where it is offered, and where it is refused.

Read as documentation: a refused case carries the side condition that fails. An empty list of refused cases is for rules
that are legal wherever their shape fits.
"""

from __future__ import annotations

# rule: (offered queries, [(refused query, failing side condition), ...])
CASES: dict[str, tuple[list[str], list[tuple[str, str]]]] = {
    "merge-selections": (
        ["select a from (select * from r where b > 0) x where c < 3"],
        [],
    ),
    "split-selection": (["select a from t where b > 0 and h < 3"], []),
    "push-selection-below-projection": (
        ["select * from (select a + 1 as n, b from t) x where n > 1"],
        [("select * from (select a, random() as n from t) x where n > 2", "same-at-every-call")],
    ),
    "push-selection-below-join": (
        [
            "select r.a, s.f from r left join s on r.a = s.a where r.b > 1",
            "select r.a, t.h from r join t on r.a = t.a where t.h < 2 and r.b > 0",
            "select r.a from r semi join s on r.a = s.a where r.c is null",
        ],
        [
            ("select r.a, s.f from r left join s on r.a = s.a where s.f is null", "side-is-not-padded"),
            ("select r.a, s.f from r right join s on r.a = s.a where r.b is null", "side-is-not-padded"),
            ("select r.a, t.h from r full join t on r.a = t.a where t.h = 1 or t.h is null", "side-is-not-padded"),
        ],
    ),
    "selection-into-join": (
        ["select r.a, t.h from r, t where r.a = t.a and t.b < r.b"],
        [("select r.a, t.h from r left join t on r.a = t.a where t.b < r.b", "inner-join")],
    ),
    "selection-out-of-join": (["select r.a, t.h from r join t on r.a = t.a and t.h > 1"], []),
    "push-selection-below-grouping": (
        [
            "select a, count(*) as n from t group by a having a > 1",
            "select a, b, max(h) as n from t group by a, b having b = 1 and max(h) > 1",
        ],
        [
            ("select a, count(*) as n from t group by a having count(*) > 1", "reads-keys-only"),
            ("select a, count(*) as n from t group by rollup (a) having a is null", "plain-grouping"),
        ],
    ),
    "push-selection-below-distinct-or-sort": (
        ["select * from (select distinct a, b from t) x where a > 1"],
        [],
    ),
    "push-selection-below-window": (
        ["select a, b, count(*) over (partition by a) as n from t qualify a > 1"],
        [("select a, b, count(*) over (partition by a) as n from t qualify b > 1", "whole-partitions")],
    ),
    "push-selection-below-set-operation": (
        [
            "select * from (select a from r union all select h from t) x where a > 1",
            "select * from (select a from t except all select a from r) x where a > 1",
            "select * from (select a from t intersect select b from r) x where a > 1",
        ],
        [],
    ),
    "contradiction-to-empty": (
        ["select a from t where b = 1 and b = 2", "select r.a from r where r.a is null"],
        [],
    ),
    "drop-tautology": (["select a from r where a is not null and b > 1"], []),
    "derive-selection-through-equality": (["select r.a, t.h from r, t where r.a = t.a and r.a = 2"], []),
    "commute-join": (
        ["select r.a, t.h from r join t on r.a = t.a", "select r.a, t.h from r left join t on r.a = t.a"],
        [("select r.a, x.h from r, lateral (select h from t where t.a = r.a) x", "sides-apart")],
    ),
    "associate-join": (
        ["select r.b, s.f, u.k from r join s on r.a = s.a join u on s.e = u.e"],
        [
            ("select r.b, s.f, u.k from r join s on r.a = s.a join u on r.a = u.a", "no-product-made"),
        ],
    ),
    "simplify-outer-join": (
        [
            "select r.a, t.h from r left join t on r.a = t.a where t.h > 1",
            "select r.a, t.h from r full join t on r.a = t.a where r.b = 1",
            "select r.a, s.f from r left join t on r.a = t.a join s on t.h = s.e",
        ],
        [("select r.a, t.h from r left join t on r.a = t.a where coalesce(t.h, 2) > 1", "condition-rejects-nulls")],
    ),
    "join-to-semi-join": (
        [
            "select distinct r.a from r join t on r.b = t.a",
            "select r.b, count(distinct r.a) as n from r join t on r.b = t.a group by r.b",
            "select t.h from t join r on t.a = r.a",
        ],
        [
            ("select r.a from r join t on r.b = t.a", "no-row-is-multiplied"),
            ("select distinct r.a, t.h from r join t on r.b = t.a", "side-is-not-read"),
        ],
    ),
    "semi-join-to-join": (
        ["select t.h from t semi join r on t.a = r.a"],
        [
            ("select r.b from r semi join t on r.b = t.a", "no-row-is-multiplied"),
            ("select distinct * from (select b from r) x semi join t on x.b = t.a", "schema-may-grow"),
        ],
    ),
    "eliminate-join": (
        [
            "select u.k from u join r on u.a = r.a",
            "select t.h from t left join r on t.a = r.a",
            "select u.k from u semi join s on u.e = s.e",
        ],
        [
            ("select s.f from s join r on s.a = r.a", "every-row-has-a-partner"),
            ("select r.a from r left join t on r.b = t.a", "no-row-is-multiplied"),
            ("select u.k, r.b from u join r on u.a = r.a", "side-is-not-read"),
        ],
    ),
    "null-test-to-anti-join": (
        [
            "select r.b from r left join s on r.a = s.a where s.e is null",
            "select r.b from r left join t on r.a = t.a where t.a is null",
        ],
        [
            ("select r.b from r left join t on r.a = t.a where t.h is null", "null-means-no-partner"),
        ],
    ),
    "merge-projections": (
        ["select n + 1 as m from (select a + b as n from t) x"],
        [("select n + n as m from (select random() as n, a from t) x", "same-at-every-call")],
    ),
    "drop-identity-projection": (
        ["select b, a, h from t"],
        [("select a from t", "nothing-is-dropped")],
    ),
    "narrow-projection": (["select n from (select a + b as n, h as m from t) x"], []),
    "drop-distinct": (
        ["select distinct a, b from r", "select distinct a from (select distinct a, b from t) x"],
        [("select distinct b, c from r", "no-duplicates")],
    ),
    "group-on-key": (
        ["select a, count(*) as n, max(c) as m, count(c) as k, sum(b) as w from r group by a"],
        [
            ("select b, count(*) as n from r group by b", "one-row-a-group"),
            ("select a, string_agg(d, ',') as n from r group by a", "aggregates-of-one-row"),
        ],
    ),
    "distinct-to-group": (["select distinct a, b from t"], []),
    "group-to-distinct": (["select a, b from t group by a, b"], []),
    "count-distinct-to-count": (
        [
            "select b, count(distinct a) as n from r group by b",
            "select b, count(distinct c) as n from (select distinct b, c from r) x group by b",
        ],
        [("select b, count(distinct c) as n from r group by b", "values-are-different")],
    ),
    "drop-idle-aggregates": (["select b from (select b, count(*) as count from t group by b) x"], []),
    "union-to-union-all": (
        [
            "select distinct a from (select a from r union select h from t) x",
            "select a, 1 as which from r union select e, 2 from s",
        ],
        [("select a from r union select e from s", "no-duplicates")],
    ),
    "flatten-union": (
        ["select a from r union all (select e from s union all select h from t)"],
        [("select a from r union all (select b from t union select h from t)", "same-meaning-inside")],
    ),
    "set-operation-to-half-join": (
        ["select a, b from t except select a, b from r", "select a from t intersect select b from t"],
        [
            ("select a from t except all select b from r", "set-meaning"),
            ("select a from t intersect all select b from t", "set-meaning"),
        ],
    ),
    "drop-sort": (
        ["select b, count(*) as n from (select a, b from t order by h) x group by b"],
        [
            ("select a from r order by b, a", "order-is-not-read"),
            ("select count(*) as n from (select a from r order by a limit 2) x where a > 1", "order-is-not-read"),
        ],
    ),
    "limit-below-projection": (
        ["select a + 1 as n from r limit 100", "select a + 1 as n from r limit 0"],
        [],
    ),
    "lift-correlation": (
        [
            "select a from r where exists (select 1 from t where t.a = r.a and t.h > 1)",
            "select a from r where not exists (select 1 from t where t.a < r.b)",
            "select a, b in (select t.b from t where t.a = r.a) as m from r",
        ],
        [
            (
                "select distinct * from (select a from r) q, lateral (select h from t where t.a < q.a) x",
                "schema-may-grow",
            )
        ],
    ),
    "scalar-aggregate-to-join": (
        [
            "select a, (select count(h) from t where t.a = r.b) as n from r",
            "select a from r where c = (select count(t.h) from t where t.a = r.a and t.b < 3)",
            "select a, (select coalesce(sum(h), 7) + 1 from t where t.a = r.b) as n from r",
        ],
        [
            ("select a, (select count(h) from t where t.a < r.b) as n from r", "tied-by-equality"),
            ("select a, (select sum(h + r.b) from t where t.a = r.a) as n from r", "outer-row-read-nowhere-else"),
            ("select a, (select approx_count_distinct(h) from t where t.a = r.b) as n from r", "empty-group-is-known"),
        ],
    ),
    "single-to-left-join": (
        ["select t.h, (select d from r where r.a = t.a) as d from t"],
        [("select r.a, (select h from t where t.a = r.a) as h from r", "at-most-one-row")],
    ),
    "not-in-to-not-exists": (
        ["select a from r where a not in (select a from u)"],
        [
            ("select a from r where a not in (select a from s)", "nothing-is-null"),
            ("select a from r where c not in (select a from u)", "nothing-is-null"),
        ],
    ),
    "mark-to-half-join": (
        [
            "select a from r where (b in (select h from t)) is true",
            "select a from r where (c in (select h from t)) is false",
        ],
        [
            (
                "select a, m from (select a, b in (select h from t) as m from r) x where m",
                "mark-is-read-once after push-selection-below-projection",
            )
        ],
    ),
}

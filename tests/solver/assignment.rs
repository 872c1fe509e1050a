//! The sparse assignment against enumeration, known optima and its own duals.

use std::io::Read;
use std::path::{Path, PathBuf};

use asterskein::maths::assign::{Edges, FREE, Solver, Unmatchable};
use proptest::prelude::*;
use serde::Deserialize;

/// A graph that owns its edges.
#[derive(Clone, Debug)]
struct Graph {
    n_right: usize,
    first: Vec<u32>,
    to: Vec<u32>,
    cost: Vec<f64>,
}

impl Graph {
    fn new(n_left: usize, n_right: usize, mut edges: Vec<(usize, usize, f64)>) -> Self {
        edges.sort_by_key(|e| (e.0, e.1));
        let mut first = vec![0; n_left + 1];
        for e in &edges {
            first[e.0 + 1] += 1;
        }
        for k in 0..n_left {
            first[k + 1] += first[k];
        }
        Self {
            n_right,
            first,
            to: edges.iter().map(|e| e.1 as u32).collect(),
            cost: edges.iter().map(|e| e.2).collect(),
        }
    }

    fn edges(&self) -> Edges<'_> {
        Edges {
            n_right: self.n_right,
            first: &self.first,
            to: &self.to,
            cost: &self.cost,
        }
    }
}

/// Least cost over all matchings, by trying them all.
fn enumerate(g: &Graph, miss: &[f64], left: usize, used: u32) -> f64 {
    if left + 1 == g.first.len() {
        return 0.0;
    }
    let mut best = miss[left] + enumerate(g, miss, left + 1, used);
    for e in g.first[left] as usize..g.first[left + 1] as usize {
        if used & (1 << g.to[e]) == 0 {
            best = best.min(g.cost[e] + enumerate(g, miss, left + 1, used | 1 << g.to[e]));
        }
    }
    best
}

/// Partners agree, nobody is used twice, and the prices prove the cost.
fn assert_proven(s: &Solver, g: &Graph, miss: &[f64], cost: f64) {
    let scale = g.cost.iter().fold(1.0f64, |m, c| m.max(c.abs()));
    let eps = 1e-9 * scale * (1 + g.first.len()) as f64;
    let (u, v) = (s.left_prices(), s.right_prices());
    for (left, &right) in s.right_of_left().iter().enumerate() {
        if right != FREE {
            assert_eq!(s.left_of_right()[right as usize], left as u32);
        }
        if let Some(&m) = miss.get(left) {
            assert!(u[left] <= m + eps, "left {left} pays more than its miss");
        }
        for e in g.first[left] as usize..g.first[left + 1] as usize {
            let r = g.to[e] as usize;
            assert!(
                u[left] + v[r] <= g.cost[e] + eps,
                "edge {left}-{r} is underpriced"
            );
        }
    }
    for (right, &left) in s.left_of_right().iter().enumerate() {
        assert!(v[right] <= 0.0);
        if left == FREE {
            assert_eq!(v[right], 0.0, "an unused node has a price");
        } else {
            assert_eq!(s.right_of_left()[left as usize], right as u32);
        }
    }
    let dual: f64 = u.iter().sum::<f64>() + v.iter().sum::<f64>();
    assert!(
        (dual - cost).abs() <= eps,
        "prices sum to {dual}, cost is {cost}"
    );
}

#[derive(Deserialize)]
struct Instance {
    name: String,
    rows: usize,
    cols: usize,
    row: Vec<usize>,
    col: Vec<usize>,
    cost: Vec<f64>,
    optimum: Option<f64>,
}

fn check_instances(path: &Path) -> usize {
    let text = std::fs::read_to_string(path).expect("the instances can be read");
    let mut solver = Solver::default();
    for line in text.lines() {
        let i: Instance = serde_json::from_str(line).expect("an instance per line");
        let edges = (0..i.row.len()).map(|k| (i.row[k], i.col[k], i.cost[k]));
        let g = if i.rows <= i.cols {
            Graph::new(i.rows, i.cols, edges.collect())
        } else {
            Graph::new(i.cols, i.rows, edges.map(|(r, c, w)| (c, r, w)).collect())
        };
        match (solver.solve(g.edges(), &[]), i.optimum) {
            (Ok(cost), Some(optimum)) => {
                let eps = 1e-9 * optimum.abs().max(1.0);
                assert!(
                    (cost - optimum).abs() <= eps,
                    "{}: {cost} for {optimum}",
                    i.name
                );
                assert_proven(&solver, &g, &[], cost);
            }
            (Err(Unmatchable { .. }), None) => {}
            (found, wanted) => panic!("{}: {found:?} for {wanted:?}", i.name),
        }
        if i.name.starts_with("gated-miss") {
            let real = i.cols - i.rows;
            let mut miss = vec![f64::INFINITY; i.rows];
            let mut kept = Vec::new();
            for k in 0..i.row.len() {
                if i.col[k] < real {
                    kept.push((i.row[k], i.col[k], i.cost[k]));
                } else {
                    miss[i.row[k]] = i.cost[k];
                }
            }
            let g = Graph::new(i.rows, real, kept);
            let cost = solver
                .solve(g.edges(), &miss)
                .expect("a miss is always open");
            let optimum = i.optimum.expect("gated instances are feasible");
            assert!(
                (cost - optimum).abs() <= 1e-9 * optimum,
                "{}: {cost}",
                i.name
            );
            assert_proven(&solver, &g, &miss, cost);
        }
    }
    text.lines().count()
}

/// Optima by scipy's linear_sum_assignment and, again, by HiGHS (fixtures/assignment/WHY.md).
#[test]
fn known_optima_are_met() {
    let path = Path::new(env!("CARGO_MANIFEST_DIR")).join("fixtures/assignment/generated.jsonl");
    assert_eq!(check_instances(&path), 29);
}

/// Data kept outside the project, where it is present.
fn outside() -> Option<PathBuf> {
    let dir = Path::new(env!("CARGO_MANIFEST_DIR")).join("../shared/data/assignment");
    dir.is_dir().then_some(dir)
}

#[test]
fn the_larger_instances_outside_the_project_are_met() {
    if let Some(dir) = outside() {
        assert_eq!(check_instances(&dir.join("generated.jsonl")), 31);
    }
}

/// OR-Library assignment problems (Beasley 1990, J. Opl Res. Soc. 41, 1069) with the published
/// optima.
#[test]
fn published_optima_are_met() {
    let Some(dir) = outside() else { return };
    let mut solver = Solver::default();
    for (n, optimum) in [(100, 305.0), (500, 991.0), (600, 1176.0), (700, 1362.0)] {
        let file = std::fs::File::open(dir.join(format!("assign{n}.txt.gz"))).expect("the file");
        let mut text = String::new();
        flate2::read::GzDecoder::new(file)
            .read_to_string(&mut text)
            .expect("gzip text");
        let mut numbers = text
            .split_ascii_whitespace()
            .map(|w| w.parse::<f64>().expect("a number"));
        assert_eq!(numbers.next(), Some(f64::from(n)));
        let n = n as usize;
        let edges: Vec<_> = numbers
            .enumerate()
            .map(|(k, c)| (k / n, k % n, c))
            .collect();
        assert_eq!(edges.len(), n * n);
        let g = Graph::new(n, n, edges);
        assert_eq!(solver.solve(g.edges(), &[]), Ok(optimum));
        assert_proven(&solver, &g, &[], optimum);
    }
}

/// Graphs of up to 7 x 7; few distinct costs, so that ties are common.
fn small_graph() -> impl Strategy<Value = (Graph, Vec<f64>)> {
    (1usize..=7, 1usize..=7).prop_flat_map(|(n_left, n_right)| {
        let cell = prop_oneof![
            2 => Just(None),
            2 => (-4i32..9).prop_map(|c| Some(f64::from(c))),
            2 => (-3.0..8.0f64).prop_map(Some),
        ];
        let cells = prop::collection::vec(cell, n_left * n_right);
        let miss = prop::collection::vec((-2i32..6).prop_map(f64::from), n_left);
        (cells, miss).prop_map(move |(cells, miss)| {
            let edges = cells
                .iter()
                .enumerate()
                .filter_map(|(k, c)| c.map(|c| (k / n_right, k % n_right, c)))
                .collect();
            (Graph::new(n_left, n_right, edges), miss)
        })
    })
}

proptest! {
    #![proptest_config(ProptestConfig { cases: 1500, failure_persistence: None, ..ProptestConfig::default() })]

    #[test]
    fn equals_enumeration((g, miss) in small_graph()) {
        let mut solver = Solver::default();
        let cost = solver.solve(g.edges(), &miss).expect("a miss is always open");
        let least = enumerate(&g, &miss, 0, 0);
        prop_assert!((cost - least).abs() < 1e-9, "{} for {}", cost, least);
        assert_proven(&solver, &g, &miss, cost);
    }

    #[test]
    fn weight_equals_enumeration((g, _) in small_graph()) {
        let negated = Graph { cost: g.cost.iter().map(|w| -w).collect(), ..g.clone() };
        let most = -enumerate(&negated, &vec![0.0; g.first.len() - 1], 0, 0);
        prop_assert!((Solver::default().max_weight(g.edges()) - most).abs() < 1e-9);
    }

    /// A solver that has seen another problem gives the same partners as a fresh one.
    #[test]
    fn reuse_changes_nothing((a, miss_a) in small_graph(), (b, miss_b) in small_graph()) {
        let (mut used, mut fresh) = (Solver::default(), Solver::default());
        used.solve(a.edges(), &miss_a).expect("a miss is always open");
        used.solve(b.edges(), &miss_b).expect("a miss is always open");
        fresh.solve(b.edges(), &miss_b).expect("a miss is always open");
        prop_assert_eq!(used.right_of_left(), fresh.right_of_left());
        prop_assert_eq!(used.left_prices(), fresh.left_prices());
    }
}

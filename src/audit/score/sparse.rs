//! Rows grouped by a small integer.

/// Values by group: those of group g are `values[start[g]..start[g + 1]]`, in row order.
#[derive(Clone, Debug)]
pub struct Grouped {
    start: Vec<u32>,
    values: Vec<u32>,
}

impl Grouped {
    /// Groups `(group, value)` rows by counting; `n` is the number of groups.
    pub fn new(n: usize, rows: impl Iterator<Item = (u32, u32)> + Clone) -> Self {
        let mut start = vec![0u32; n + 1];
        for (group, _) in rows.clone() {
            start[group as usize + 1] += 1;
        }
        for g in 0..n {
            start[g + 1] += start[g];
        }
        let mut next = start.clone();
        let mut values = vec![0; start[n] as usize];
        for (group, value) in rows {
            values[next[group as usize] as usize] = value;
            next[group as usize] += 1;
        }
        Self { start, values }
    }

    #[must_use]
    pub fn of(&self, group: u32) -> &[u32] {
        &self.values[self.start[group as usize] as usize..self.start[group as usize + 1] as usize]
    }

    #[must_use]
    pub fn holds(&self, group: u32, value: u32) -> bool {
        self.of(group).contains(&value)
    }

    /// Do two groups have a value in common?
    #[must_use]
    pub fn share_any(&self, a: u32, b: u32) -> bool {
        self.of(a).iter().any(|&v| self.holds(b, v))
    }
}

/// How often each of `0..n` occurs.
#[must_use]
pub fn counts(n: usize, values: impl Iterator<Item = u32>) -> Vec<u32> {
    let mut out = vec![0; n];
    for v in values {
        out[v as usize] += 1;
    }
    out
}

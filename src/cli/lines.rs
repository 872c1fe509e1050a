//! Tables on a terminal: columns that line up.

use std::fmt;

#[derive(Clone, Copy, Debug, PartialEq, Eq)]
pub enum Align {
    /// Texts.
    Left,
    /// Numbers.
    Right,
}

/// Rows of texts under a heading.
#[derive(Debug)]
pub struct Lines {
    align: Vec<Align>,
    rows: Vec<Vec<String>>,
}

impl Lines {
    pub fn new(heading: &[(&str, Align)]) -> Self {
        Self {
            align: heading.iter().map(|h| h.1).collect(),
            rows: vec![heading.iter().map(|h| h.0.to_owned()).collect()],
        }
    }

    pub fn push(&mut self, row: Vec<String>) {
        self.rows.push(row);
    }
}

impl fmt::Display for Lines {
    fn fmt(&self, f: &mut fmt::Formatter<'_>) -> fmt::Result {
        let widths: Vec<usize> = (0..self.align.len())
            .map(|c| {
                let cells = self.rows.iter().map(|r| r[c].chars().count());
                cells.max().unwrap_or(0)
            })
            .collect();
        for row in &self.rows {
            let mut line = String::new();
            for ((cell, &width), align) in row.iter().zip(&widths).zip(&self.align) {
                if !line.is_empty() {
                    line.push_str("  ");
                }
                line.push_str(&match align {
                    Align::Left => format!("{cell:<width$}"),
                    Align::Right => format!("{cell:>width$}"),
                });
            }
            writeln!(f, "{}", line.trim_end())?;
        }
        Ok(())
    }
}

#[cfg(test)]
mod tests {
    use super::*;

    #[test]
    fn texts_left_numbers_right() {
        let mut t = Lines::new(&[("name", Align::Left), ("n", Align::Right)]);
        t.push(vec!["a".into(), "12".into()]);
        t.push(vec!["longer".into(), String::new()]);
        assert_eq!(t.to_string(), "name     n\na       12\nlonger\n");
    }
}

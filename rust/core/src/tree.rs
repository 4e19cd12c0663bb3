//! The canonical merge tree: leaves (or whole tasks of 2^m leaves) arrive in order and merge as a binary counter, so the
//! order of additions depends on row numbers alone.

use crate::error::Result;
use crate::measure::Measure;

/// The measures of a run, side by side.
pub type Sums = Vec<Box<dyn Measure>>;

/// Partial results of the leaves or tasks so far, one for each set bit of their number.
#[derive(Default)]
pub struct Tree {
    stack: Vec<(u32, Sums)>,
    /// Emptied measures of merged nodes, for leaves to come.
    pub spare: Vec<Sums>,
}

fn merge(mut earlier: Sums, later: Sums, spare: &mut Vec<Sums>) -> Result<Sums> {
    let mut empty = Vec::with_capacity(later.len());
    for (a, b) in earlier.iter_mut().zip(later) {
        empty.extend(a.absorb(b)?);
    }
    if empty.len() == earlier.len() {
        spare.push(empty);
    }
    Ok(earlier)
}

impl Tree {
    /// An empty tree.
    pub fn new() -> Self {
        Self::default()
    }

    /// Adds the next leaf or task.
    pub fn push(&mut self, sums: Sums) -> Result<()> {
        let (mut level, mut sums) = (0, sums);
        while self.stack.last().is_some_and(|(l, _)| *l == level) {
            if let Some((_, earlier)) = self.stack.pop() {
                sums = merge(earlier, sums, &mut self.spare)?;
                level += 1;
            }
        }
        self.stack.push((level, sums));
        Ok(())
    }

    /// Merges what is left, the latest first. `None` when nothing was pushed.
    pub fn finish(&mut self) -> Result<Option<Sums>> {
        let Some((_, mut sums)) = self.stack.pop() else { return Ok(None) };
        while let Some((_, earlier)) = self.stack.pop() {
            sums = merge(earlier, sums, &mut self.spare)?;
        }
        Ok(Some(sums))
    }
}

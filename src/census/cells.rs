//! Cells of degree: single degrees first, then ranges that grow in proportion.

/// A cell is a twentieth of its lowest degree wide, and at least one degree.
const CELLS_PER_DEGREE: u32 = 20;
/// Below this degree every cell is a single degree.
const FIRST_WIDE: u32 = 2 * CELLS_PER_DEGREE;
/// Slices of an octave in the table that leads to the cells; finer than the cells are.
const SLICE_BITS: u32 = 5;

/// The bounds of every cell, and a table that leads from a degree to its cell.
#[derive(Debug)]
pub struct Cells {
    highest: Vec<u32>,
    slices: Vec<u16>,
}

impl Default for Cells {
    fn default() -> Self {
        let mut highest = Vec::new();
        let mut lowest = 0;
        loop {
            let width = (lowest / CELLS_PER_DEGREE).max(1);
            let last = u32::saturating_add(lowest, width - 1);
            highest.push(last);
            let Some(next) = last.checked_add(1) else { break };
            lowest = next;
        }
        let octaves = u32::BITS << SLICE_BITS;
        let slices = (0..octaves).map(|slice| highest.partition_point(|&last| last < slice_start(slice)) as u16);
        Self { slices: slices.collect(), highest }
    }
}

/// The slice of a degree from 2^5 on: its octave and the bits that follow the leading one.
#[inline]
fn slice(degree: u32) -> u32 {
    let octave = degree.ilog2();
    (octave << SLICE_BITS) | (degree >> (octave - SLICE_BITS)) & ((1 << SLICE_BITS) - 1)
}

/// The lowest degree of a slice; of those below 2^5, which are not used, any.
fn slice_start(slice: u32) -> u32 {
    let (octave, part) = (slice >> SLICE_BITS, slice & ((1 << SLICE_BITS) - 1));
    if octave < SLICE_BITS { 0 } else { ((1 << SLICE_BITS) | part) << (octave - SLICE_BITS) }
}

impl Cells {
    /// Number of cells.
    pub fn len(&self) -> usize {
        self.highest.len()
    }

    /// Largest degree of a cell.
    #[inline]
    pub fn highest(&self, cell: usize) -> u32 {
        self.highest.get(cell).copied().unwrap_or(u32::MAX)
    }

    /// Smallest degree of a cell.
    pub fn lowest(&self, cell: usize) -> u32 {
        cell.checked_sub(1).map_or(0, |below| self.highest(below).saturating_add(1))
    }

    /// The cell of a degree.
    #[inline]
    pub fn of(&self, degree: u32) -> usize {
        if degree < FIRST_WIDE {
            return degree as usize;
        }
        let mut cell = usize::from(self.slices.get(slice(degree) as usize).copied().unwrap_or_default());
        while degree > self.highest(cell) {
            cell += 1;
        }
        cell
    }
}

#[cfg(test)]
mod tests {
    use super::*;

    #[test]
    fn every_degree_has_its_cell_and_no_cell_is_wider_than_a_twentieth() {
        let cells = Cells::default();
        let near_bounds = (0..cells.len()).flat_map(|cell| [cells.lowest(cell), cells.highest(cell)]);
        for degree in (0..100_000).chain(near_bounds).chain([u32::MAX - 1, u32::MAX]) {
            let cell = cells.of(degree);
            let (lowest, highest) = (cells.lowest(cell), cells.highest(cell));
            assert!(lowest <= degree && degree <= highest, "{degree} in {lowest}..={highest}");
            assert!(f64::from(highest - lowest + 1) <= (0.05 * f64::from(lowest)).max(1.0));
        }
        assert!((0..=20).all(|degree| cells.of(degree) == degree as usize));
        assert_eq!((cells.lowest(40), cells.highest(40)), (40, 41));
    }
}

//! The high parts of a vector in the order in which products go through them, with everything
//! that a product needs to know of each.

use super::lanes::{LaneMatrix, Run};
use super::modes::ModeOperator;
use super::spaces::HalfSpaces;
use super::stored::SparseMatrix;
use super::terms::ModeTerms;
use super::walker::ModeSpace;
use crate::error::Result;
use crate::scalar::Scalar;
use ndarray::Array2;
use std::ops::Range;

/// Shortest average length of pieces that are shifted rather than transposed.
const LONG_RUN: usize = 16;

/// The high parts: a segment of the vector each.
#[derive(Debug, Clone)]
pub struct HighParts<T> {
    /// Where each segment starts.
    pub starts: Vec<usize>,
    /// Energy of the high particles.
    pub levels: Vec<f64>,
    /// What a particle in each coupled low mode feels: `(parts, coupled modes)`.
    pub potentials: Array2<f64>,
    /// Hops of the high particles.
    pub hops: SparseMatrix<T>,
    /// Hops across that lead to each part and are done in tiles, by increasing ladder,
    pub crossings: Crossings,
    /// and those that shift long pieces of segments.
    pub shifts: Crossings,
    /// Parts that are neighbours in the vector.
    pub blocks: Vec<Block>,
}

/// A hop across that leads to a high part.
#[derive(Debug, Clone, Copy)]
pub struct Crossing {
    /// What happens to the low particles.
    pub ladder: u32,
    /// High part hopped from.
    pub from: u32,
    /// The factor from the high particles.
    pub factor: f64,
}

/// Hops across by the part they lead to.
#[derive(Debug, Clone)]
pub struct Crossings {
    list: Vec<Crossing>,
    /// Where those of each part start; one more than parts.
    starts: Vec<usize>,
}

impl Crossings {
    /// Those of a part.
    #[inline]
    pub fn of_part(&self, part: usize) -> &[Crossing] {
        &self.list[self.starts[part]..self.starts[part + 1]]
    }
}

/// High parts whose segments make up a piece of the vector.
#[derive(Debug, Clone)]
pub struct Block {
    /// Elements of the vector.
    pub elements: Range<usize>,
    /// Class and parts.
    pub groups: Vec<(usize, Range<usize>)>,
}

/// Hops that create or annihilate a particle in one high mode: what they do to the low parts.
#[derive(Debug, Clone)]
pub struct Ladder<T> {
    /// Width of the segments hopped from.
    pub width: usize,
    /// `(width of the class led to, width of the class hopped from)`.
    pub low: LaneMatrix<T>,
    /// The same as shifts of pieces, if they are long; else empty.
    pub runs: Vec<Run<T>>,
}

impl<T> Ladder<T> {
    /// Whether it shifts long pieces.
    pub fn shifts(&self) -> bool {
        !self.runs.is_empty()
    }
}

/// A high part before it has its place.
struct Part {
    start: usize,
    class: usize,
    index: usize,
    /// Which ladders lead here, to bring together parts that are alike.
    pattern: u128,
}

/// A ladder that leads to a class: for each high part the one hopped from and the factor.
struct Arrivals {
    ladder: usize,
    from: usize,
    high: Vec<Option<(u32, f64)>>,
}

impl<T: Scalar> HighParts<T> {
    /// The parts and the ladders between them.
    ///
    /// # Errors
    /// Those of [`ModeSpace::walker`].
    pub fn new(
        halves: &HalfSpaces<'_>,
        terms: &ModeTerms<T>,
        coupled: &[usize],
        block_size: usize,
    ) -> Result<(Self, Vec<Ladder<T>>)> {
        let mut ladders = Vec::new();
        let mut arrivals = Vec::new();
        let mut parts = Vec::new();
        for class in 0..halves.classes() {
            let here = arrivals_at(halves, terms, class, &mut ladders)?;
            for (index, start) in halves.segments(class)?.into_iter().enumerate() {
                let present = here
                    .iter()
                    .enumerate()
                    .filter(|(_, a)| a.high[index].is_some() && !ladders[a.ladder].shifts());
                let pattern = present.fold(0, |bits, (k, _)| bits | 1 << (k % 128));
                parts.push(Part {
                    start,
                    class,
                    index,
                    pattern,
                });
            }
            arrivals.push(here);
        }
        let blocks = arrange(&mut parts, halves, block_size);
        let mut places: Vec<Vec<u32>> = (0..halves.classes())
            .map(|c| vec![0; halves.spaces(c).1.dimension()])
            .collect();
        for (place, part) in parts.iter().enumerate() {
            places[part.class][part.index] = place as u32;
        }
        let shifts = |ladder: usize| ladders[ladder].shifts();
        let mut high = HighParts {
            starts: parts.iter().map(|part| part.start).collect(),
            levels: Vec::with_capacity(parts.len()),
            potentials: potentials(halves, terms, coupled, &parts)?,
            hops: SparseMatrix {
                row_starts: vec![0],
                columns: Vec::new(),
                values: Vec::new(),
            },
            crossings: crossings(&arrivals, &parts, &places, |ladder: usize| !shifts(ladder)),
            shifts: crossings(&arrivals, &parts, &places, shifts),
            blocks,
        };
        high.add_hops(halves, &terms.within(halves.ranges().1), &parts, &places);
        Ok((high, ladders))
    }

    fn add_hops(
        &mut self,
        halves: &HalfSpaces<'_>,
        terms: &ModeTerms<T>,
        parts: &[Part],
        places: &[Vec<u32>],
    ) {
        let matrices: Vec<SparseMatrix<T>> = (0..halves.classes())
            .map(|class| on_space(halves.spaces(class).1, terms.clone()))
            .collect();
        for part in parts {
            let (columns, values) = matrices[part.class].row(part.index);
            let mut level = 0.0;
            for (&column, &value) in columns.iter().zip(values) {
                if column as usize == part.index {
                    level = value.re();
                } else {
                    self.hops.columns.push(places[part.class][column as usize]);
                    self.hops.values.push(value);
                }
            }
            self.levels.push(level);
            self.hops.row_starts.push(self.hops.columns.len());
        }
    }
}

/// The hops across that `chosen` ladders do.
fn crossings(
    arrivals: &[Vec<Arrivals>],
    parts: &[Part],
    places: &[Vec<u32>],
    chosen: impl Fn(usize) -> bool,
) -> Crossings {
    let mut crossings = Crossings {
        list: Vec::new(),
        starts: vec![0],
    };
    for part in parts {
        for arrival in arrivals[part.class].iter().filter(|a| chosen(a.ladder)) {
            if let Some((index, factor)) = arrival.high[part.index] {
                crossings.list.push(Crossing {
                    ladder: arrival.ladder as u32,
                    from: places[arrival.from][index as usize],
                    factor,
                });
            }
        }
        crossings.starts.push(crossings.list.len());
    }
    crossings
}

/// A matrix with at most one element a row as shifts of pieces; empty if these are short.
fn runs<T: Scalar>(matrix: &SparseMatrix<T>) -> Vec<Run<T>> {
    let mut runs: Vec<Run<T>> = Vec::new();
    for row in 0..matrix.rows() {
        match matrix.row(row) {
            ([], _) => {}
            (&[column], &[value]) => match runs.last_mut() {
                Some(run)
                    if run.value == value
                        && run.target + run.length == row
                        && run.source + run.length == column as usize =>
                {
                    run.length += 1;
                }
                _ => runs.push(Run {
                    target: row,
                    source: column as usize,
                    length: 1,
                    value,
                }),
            },
            _ => return Vec::new(),
        }
    }
    if runs.len() * LONG_RUN > matrix.values.len() {
        runs.clear();
    }
    runs
}

/// H of some terms on a space, without zeros.
pub fn on_space<T: Scalar>(space: &ModeSpace, terms: ModeTerms<T>) -> SparseMatrix<T> {
    ModeOperator::new(space.clone(), terms)
        .to_sparse()
        .without_zeros()
}

/// Brings the parts into the order of the vector, and within blocks those of a class together,
/// for full tiles.
fn arrange(parts: &mut [Part], halves: &HalfSpaces<'_>, block_size: usize) -> Vec<Block> {
    parts.sort_unstable_by_key(|part| part.start);
    let width = |part: &Part| halves.spaces(part.class).0.dimension();
    let mut blocks = Vec::new();
    let mut first = 0;
    while first < parts.len() {
        let start = parts[first].start;
        let last = first + parts[first..].partition_point(|part| part.start < start + block_size);
        let end = parts[last - 1].start + width(&parts[last - 1]);
        let inside = &mut parts[first..last];
        inside.sort_unstable_by_key(|part| (part.class, part.pattern, part.start));
        let mut groups = Vec::new();
        for group in inside.chunk_by(|a, b| a.class == b.class) {
            groups.push((group[0].class, first..first + group.len()));
            first += group.len();
        }
        blocks.push(Block {
            elements: start..end,
            groups,
        });
    }
    blocks
}

/// What a particle in each coupled low mode feels from the high parts.
fn potentials<T: Scalar>(
    halves: &HalfSpaces<'_>,
    terms: &ModeTerms<T>,
    coupled: &[usize],
    parts: &[Part],
) -> Result<Array2<f64>> {
    let mut potentials = Array2::zeros((parts.len(), coupled.len()));
    if coupled.is_empty() {
        return Ok(potentials);
    }
    let occupied = (0..halves.classes())
        .map(|class| halves.spaces(class).1.occupied())
        .collect::<Result<Vec<_>>>()?;
    for (part, mut row) in parts.iter().zip(potentials.rows_mut()) {
        for &(p, n) in &occupied[part.class][part.index] {
            for (total, &q) in row.iter_mut().zip(coupled) {
                *total += n * terms.density()[[q, halves.low_modes() + p as usize]];
            }
        }
    }
    Ok(potentials)
}

/// Hops across that lead into a class; their ladders are added to the list.
fn arrivals_at<T: Scalar>(
    halves: &HalfSpaces<'_>,
    terms: &ModeTerms<T>,
    class: usize,
    ladders: &mut Vec<Ladder<T>>,
) -> Result<Vec<Arrivals>> {
    let low_modes = halves.low_modes();
    let (low, high) = halves.spaces(class);
    let mut list = Vec::new();
    for p in 0..high.modes() {
        for creates_high in [true, false] {
            let Some(from) = halves.neighbour(class, creates_high) else {
                continue;
            };
            let (other_low, other_high) = halves.spaces(from);
            // <b', a'| h a+_p a_q |b, a> with p high and q low, or its adjoint
            let amplitude = |q: usize| {
                let value = terms.hop_amplitude(low_modes + p, q);
                if creates_high { value } else { value.conj() }
            };
            let passing = halves.passing_sign(class, creates_high);
            let matrix = low.ladder_matrix(other_low, creates_high, |q| amplitude(q) * passing)?;
            if matrix.values.is_empty() {
                continue;
            }
            list.push(Arrivals {
                ladder: ladders.len(),
                from,
                high: high.ladder_row(other_high, p, creates_high)?,
            });
            ladders.push(Ladder {
                width: other_low.dimension(),
                low: LaneMatrix::new(&matrix),
                runs: runs(&matrix),
            });
        }
    }
    Ok(list)
}

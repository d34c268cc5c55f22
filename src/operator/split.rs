//! Spinless particles in two groups of modes: H from the product structure of low and high
//! modes, for one-body terms and density couplings.
//!
//! Configurations with the same high part are neighbours in the colexicographic order: a
//! segment of the vector for each high part, as long as there are low parts with the remaining
//! particles. Segments with equally many low particles form a class. Hops within the low modes
//! act along the segments, hops within the high modes add whole segments of the same class, hops
//! across lead to the classes with one low particle more or less.
//!
//! Segments of one class, of several vectors if there are, are transposed into tiles of a few
//! lanes for what acts along them. Products go through the vector from front to back, block by
//! block, so that most segments hopped from are still in the cache.

use super::lanes::{
    AddProduct, AddRows, AddRuns, LANES, Lane, LaneMatrix, OwnProduct, Place, TransposeIn,
    TransposeOut,
};
use super::parts::{Block, Crossing, HighParts, Ladder, on_space};
use super::spaces::HalfSpaces;
use super::terms::ModeTerms;
use super::walker::ModeSpace;
use crate::error::Result;
use crate::scalar::Scalar;
use ndarray::{Array1, Array2, ArrayView2, ArrayViewMut2, s};
use pulp::Arch;
use rayon::prelude::*;
use std::ops::Range;

/// Lanes of a tile.
const WIDE: usize = 16;
/// Vectors handled together: their segments are the first to become lanes.
const TOGETHER: usize = 8;
/// Longest segments, on average: a tile then is about 100 KB of real numbers.
const LONGEST: f64 = 1000.0;
/// Pieces of the vector that are worked on by themselves, in any order,
const BLOCKS: usize = 32;
/// and how long they are at least: tiles need several segments of one class.
const SMALLEST_BLOCK: usize = 8192;

/// H of one kind of particles, split into low and high modes.
#[derive(Debug, Clone)]
pub struct SplitOperator<T> {
    classes: Vec<Class<T>>,
    ladders: Vec<Ladder<T>>,
    high: HighParts<T>,
    dimension: usize,
}

/// The low parts with a given number of particles.
#[derive(Debug, Clone)]
struct Class<T> {
    width: usize,
    low: LaneMatrix<T>,
    low_diagonal: Array1<f64>,
    /// Particles in the coupled modes: `(width, coupled modes)`.
    occupations: Array2<f64>,
}

/// Half of the modes, or fewer where segments would be longer than a tile should be high,
/// averaged over the elements of a vector.
fn low_modes(space: &ModeSpace) -> Result<usize> {
    for low in (2..=space.modes() / 2).rev() {
        let halves = HalfSpaces::split_at(space, low)?;
        let squares = (0..halves.classes()).map(|class| {
            let (low, high) = halves.spaces(class);
            (low.dimension() as f64).powi(2) * high.dimension() as f64
        });
        if squares.sum::<f64>() <= LONGEST * space.dimension() as f64 {
            return Ok(low);
        }
    }
    Ok(1)
}

impl<T: Scalar> SplitOperator<T> {
    /// From the terms, which must be without pair hops, on `space`.
    ///
    /// # Errors
    /// [`crate::error::Error::TooManyConfigurations`] beyond 64-bit indices.
    pub fn new(space: &ModeSpace, terms: &ModeTerms<T>) -> Result<Self> {
        let halves = HalfSpaces::split_at(space, low_modes(space)?)?;
        let (low, all) = (halves.low_modes(), space.modes());
        let coupled: Vec<usize> = (0..low)
            .filter(|&q| (low..all).any(|p| terms.density()[[q, p]] != 0.0))
            .collect();
        let classes = (0..halves.classes())
            .map(|class| Class::new(halves.spaces(class).0, terms, &coupled))
            .collect::<Result<Vec<_>>>()?;
        let block = (space.dimension() / BLOCKS).max(SMALLEST_BLOCK);
        let (high, ladders) = HighParts::new(&halves, terms, &coupled, block)?;
        Ok(SplitOperator {
            classes,
            ladders,
            high,
            dimension: space.dimension(),
        })
    }

    /// Diagonal matrix elements.
    pub fn diagonal(&self) -> Array1<f64> {
        let mut diagonal = Array1::zeros(self.dimension);
        for block in &self.high.blocks {
            for (class, parts) in &block.groups {
                for part in parts.clone() {
                    let (start, level) = (self.high.starts[part], self.high.levels[part]);
                    let class = &self.classes[*class];
                    let felt = class.occupations.dot(&self.high.potentials.row(part));
                    let mut segment = diagonal.slice_mut(s![start..start + class.width]);
                    segment.assign(&(&class.low_diagonal + level + felt));
                }
            }
        }
        diagonal
    }

    /// Overwrites row k of `out` with the product with row k of `block`.
    pub fn apply(&self, block: ArrayView2<'_, T>, mut out: ArrayViewMut2<'_, T>) {
        let block = block.as_standard_layout();
        let vectors: Vec<&[T]> = block
            .rows()
            .into_iter()
            .filter_map(|row| row.to_slice())
            .collect();
        if out.is_standard_layout() {
            let results = out
                .rows_mut()
                .into_iter()
                .filter_map(|row| row.into_slice());
            self.apply_rows(&vectors, results.collect());
        } else {
            let mut result = Array2::zeros(out.dim());
            self.apply(block.view(), result.view_mut());
            out.assign(&result);
        }
    }

    fn apply_rows(&self, vectors: &[&[T]], results: Vec<&mut [T]>) {
        let blocks = &self.high.blocks;
        let mut pieces: Vec<Vec<&mut [T]>> = blocks.iter().map(|_| Vec::new()).collect();
        for mut rest in results {
            for (block, pieces) in blocks.iter().zip(&mut pieces) {
                let (piece, tail) = rest.split_at_mut(block.elements.len());
                pieces.push(piece);
                rest = tail;
            }
        }
        let widest = self
            .classes
            .iter()
            .map(|class| class.width)
            .max()
            .unwrap_or(0);
        let coupled = self.high.potentials.ncols();
        let buffers = || Buffers {
            zeros: vec![T::zero(); widest],
            source: vec![T::zero(); widest * WIDE],
            target: vec![T::zero(); widest * WIDE],
            felt: vec![0.0; coupled * WIDE],
        };
        let tasks = blocks.par_iter().zip(pieces).with_max_len(1);
        tasks.for_each_init(buffers, |buffers, (block, mut pieces)| {
            let together = vectors.chunks(TOGETHER).zip(pieces.chunks_mut(TOGETHER));
            for (vectors, results) in together {
                self.apply_block(block, vectors, results, buffers);
            }
        });
    }

    fn apply_block(
        &self,
        block: &Block,
        vectors: &[&[T]],
        results: &mut [&mut [T]],
        buffers: &mut Buffers<T>,
    ) {
        for (class, parts) in &block.groups {
            let group = Group {
                class: *class,
                parts: parts.clone(),
                first: block.elements.start,
                vectors,
            };
            match parts.len() * vectors.len() {
                1 => self.run::<1>(group, results, buffers),
                2..=LANES => self.run::<LANES>(group, results, buffers),
                _ => self.run::<WIDE>(group, results, buffers),
            }
        }
    }

    fn run<const W: usize>(
        &self,
        group: Group<'_, T>,
        results: &mut [&mut [T]],
        buffers: &mut Buffers<T>,
    ) {
        let lanes = group.parts.len() * group.vectors.len();
        let mut product = GroupProduct::<T, W> {
            operator: self,
            arch: Arch::new(),
            group,
            results,
            zeros: &buffers.zeros,
            source: buffers.source.as_chunks_mut().0,
            target: buffers.target.as_chunks_mut().0,
            felt: &mut buffers.felt.as_chunks_mut().0[..self.high.potentials.ncols()],
        };
        for first in (0..lanes).step_by(W) {
            product.tile(first, (lanes - first).min(W));
        }
    }
}

/// Room for tiles.
struct Buffers<T> {
    zeros: Vec<T>,
    source: Vec<T>,
    target: Vec<T>,
    felt: Vec<f64>,
}

/// High parts of one class, neighbours in the vector, and the vectors to multiply.
struct Group<'a, T> {
    class: usize,
    parts: Range<usize>,
    /// Where the results start in the whole vectors.
    first: usize,
    vectors: &'a [&'a [T]],
}

/// The products of a group.
struct GroupProduct<'a, 'b, T, const W: usize> {
    operator: &'a SplitOperator<T>,
    arch: Arch,
    group: Group<'a, T>,
    results: &'a mut [&'b mut [T]],
    zeros: &'a [T],
    source: &'a mut [[T; W]],
    target: &'a mut [[T; W]],
    felt: &'a mut [[f64; W]],
}

impl<T: Scalar, const W: usize> GroupProduct<'_, '_, T, W> {
    /// `count` lanes: what acts along the segments, then hops of the high particles.
    fn tile(&mut self, first: usize, count: usize) {
        let high = &self.operator.high;
        let class = &self.operator.classes[self.group.class];
        let width = class.width;
        let vectors = self.group.vectors;
        let mut lanes = [Lane {
            source: &self.zeros[..width],
            factor: 0.0,
        }; W];
        let mut places = [(0, 0); W];
        let mut parts = [0; W];
        let mut levels = [0.0; W];
        for k in 0..count {
            let v = (first + k) % vectors.len();
            let part = self.group.parts.start + (first + k) / vectors.len();
            let start = high.starts[part];
            lanes[k] = Lane {
                source: &vectors[v][start..start + width],
                factor: 1.0,
            };
            places[k] = (v, start - self.group.first);
            parts[k] = part;
            levels[k] = high.levels[part];
            for (felt, &potential) in self.felt.iter_mut().zip(high.potentials.row(part)) {
                felt[k] = potential;
            }
        }
        let (places, parts) = (&places[..count], &parts[..count]);
        self.arch.dispatch(TransposeIn {
            lanes: &lanes,
            tile: &mut self.source[..width],
        });
        self.arch.dispatch(OwnProduct {
            matrix: &class.low,
            levels: &levels,
            felt: self.felt,
            occupations: class.occupations.as_slice().unwrap_or_default(),
            source: &self.source[..width],
            target: &mut self.target[..width],
        });
        self.add_crossings(width, parts, places);
        self.arch.dispatch(TransposeOut {
            tile: &self.target[..width],
            places,
            vectors: self.results,
        });
        self.arch.dispatch(AddRows {
            rows: parts,
            matrix: &high.hops,
            starts: &high.starts,
            width,
            vectors,
            places,
            results: self.results,
        });
        self.add_shifts(width, parts, places);
    }

    /// Hops across that shift long pieces.
    fn add_shifts(&mut self, width: usize, parts: &[usize], places: &[Place]) {
        let high = &self.operator.high;
        for (&part, &(v, start)) in parts.iter().zip(places) {
            for crossing in high.shifts.of_part(part) {
                let ladder = &self.operator.ladders[crossing.ladder as usize];
                let from = high.starts[crossing.from as usize];
                let source = &self.group.vectors[v][from..from + ladder.width];
                self.arch.dispatch(AddRuns {
                    runs: &ladder.runs,
                    lane: Lane {
                        source,
                        factor: crossing.factor,
                    },
                    target: &mut self.results[v][start..start + width],
                });
            }
        }
    }

    /// Hops across, ladder by ladder for all lanes that it leads to.
    fn add_crossings(&mut self, width: usize, parts: &[usize], places: &[Place]) {
        let high = &self.operator.high;
        let mut cursors: [&[Crossing]; W] = [&[]; W];
        let mut next = [u32::MAX; W];
        for ((cursor, next), &part) in cursors.iter_mut().zip(&mut next).zip(parts) {
            *cursor = high.crossings.of_part(part);
            *next = cursor.first().map_or(u32::MAX, |crossing| crossing.ladder);
        }
        loop {
            let mut number = u32::MAX;
            for &ladder in &next {
                number = number.min(ladder);
            }
            if number == u32::MAX {
                break;
            }
            let ladder = &self.operator.ladders[number as usize];
            let mut lanes = [Lane {
                source: &self.zeros[..ladder.width],
                factor: 0.0,
            }; W];
            for (k, &(v, _)) in places.iter().enumerate() {
                if next[k] == number {
                    let crossing = cursors[k][0];
                    let start = high.starts[crossing.from as usize];
                    lanes[k] = Lane {
                        source: &self.group.vectors[v][start..start + ladder.width],
                        factor: crossing.factor,
                    };
                    cursors[k] = &cursors[k][1..];
                    next[k] = cursors[k]
                        .first()
                        .map_or(u32::MAX, |crossing| crossing.ladder);
                }
            }
            let source = &mut self.source[..ladder.width];
            self.arch.dispatch(TransposeIn {
                lanes: &lanes,
                tile: source,
            });
            self.arch.dispatch(AddProduct {
                matrix: &ladder.low,
                source,
                target: &mut self.target[..width],
            });
        }
    }
}

impl<T: Scalar> Class<T> {
    fn new(space: &ModeSpace, terms: &ModeTerms<T>, coupled: &[usize]) -> Result<Self> {
        let low = on_space(space, terms.within(0..space.modes()));
        let mut occupations = Array2::zeros((space.dimension(), coupled.len()));
        for (occupied, mut row) in space.occupied()?.iter().zip(occupations.rows_mut()) {
            for &(q, n) in occupied {
                if let Some(number) = coupled.iter().position(|&mode| mode == q as usize) {
                    row[number] = n;
                }
            }
        }
        Ok(Class {
            width: space.dimension(),
            low_diagonal: low.diagonal(),
            low: LaneMatrix::new(&low),
            occupations,
        })
    }
}

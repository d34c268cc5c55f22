//! Points of a product of permutahedra as mixtures of its vertices.

use super::monotone::blocks;

/// A permutation of coordinates and its share of a mixture.
#[derive(Debug, Clone)]
pub(super) struct Permuted {
    pub probability: f64,
    /// `order[i]` is the coordinate that takes place i.
    pub order: Vec<usize>,
}

/// Writes `point` as a mixture of permutations of `values` that act within blocks of linked
/// coordinates. Within each block `values` must majorise `point`.
///
/// Greedy walk through faces: from a vertex of the smallest face that holds the point, go
/// through the point until the next face; the walk ends after at most as many vertices as
/// coordinates.
pub(super) fn decompose(point: &[f64], values: &[f64], links: &[bool]) -> Vec<Permuted> {
    let all: Vec<Block> = blocks(links)
        .filter(|span| span.len() > 1)
        .map(|span| Block::new(span, values))
        .collect();
    let scale = values.iter().fold(1.0f64, |m, v| m.max(v.abs()));
    let mut rest = point.to_vec();
    for block in &all {
        // sums agree but for rounding
        let span = block.span();
        let excess: f64 = span.clone().map(|i| point[i] - values[i]).sum();
        let shift = excess / span.len() as f64;
        rest[span].iter_mut().for_each(|z| *z -= shift);
    }
    // sums over a facet have about this many rounding errors
    let terms = point.len().max(16) as f64;
    let mut mass = 1.0;
    let mut result: Vec<Permuted> = Vec::new();
    for _ in 0..=point.len() {
        let mut order: Vec<usize> = (0..point.len()).collect();
        let mut direction = vec![0.0; point.len()];
        for block in &all {
            block.match_order(&rest, &mut order, &mut direction, values);
        }
        let farthest = direction.iter().fold(0.0f64, |m, d| m.max(d.abs()));
        let rounding = terms * f64::EPSILON * scale / mass;
        if farthest <= rounding {
            result.push(Permuted {
                probability: mass,
                order,
            });
            return result;
        }
        let mut reach = f64::INFINITY;
        for block in &all {
            reach = block.exit(&rest, &direction, reach, rounding);
        }
        let share = reach / (1.0 + reach);
        if share <= f64::EPSILON {
            // no way on but through rounding errors
            result.push(Permuted {
                probability: mass,
                order,
            });
            return result;
        }
        result.push(Permuted {
            probability: mass * share,
            order,
        });
        mass *= 1.0 - share;
        if mass <= f64::EPSILON {
            break;
        }
        for (z, d) in rest.iter_mut().zip(&direction) {
            *z += reach * d;
        }
    }
    // what is left is of the size of rounding errors
    let total: f64 = result.iter().map(|p| p.probability).sum();
    result.iter_mut().for_each(|p| p.probability /= total);
    result.retain(|p| p.probability > 0.0);
    result
}

/// One permutahedron.
struct Block {
    start: usize,
    /// Coordinates by decreasing value.
    ranked: Vec<usize>,
    decreasing: Vec<f64>,
    smallest: f64,
    largest: f64,
}

impl Block {
    fn new(span: std::ops::Range<usize>, values: &[f64]) -> Self {
        let ranked = ranking(&values[span.clone()], span.start);
        Block {
            start: span.start,
            decreasing: ranked.iter().map(|&i| values[i]).collect(),
            smallest: values[ranked[ranked.len() - 1]],
            largest: values[ranked[0]],
            ranked,
        }
    }

    fn span(&self) -> std::ops::Range<usize> {
        self.start..self.start + self.ranked.len()
    }

    /// Gives the largest value to the largest coordinate and so on.
    fn match_order(
        &self,
        rest: &[f64],
        order: &mut [usize],
        direction: &mut [f64],
        values: &[f64],
    ) {
        let places = ranking(&rest[self.span()], self.start);
        for (&place, &from) in places.iter().zip(&self.ranked) {
            order[place] = from;
            direction[place] = rest[place] - values[from];
        }
    }

    /// Largest step, at most `reach`, that stays inside: Newton steps on the facets at its end.
    fn exit(&self, rest: &[f64], direction: &[f64], mut reach: f64, rounding: f64) -> f64 {
        let span = self.span();
        let (rest, direction) = (&rest[span.clone()], &direction[span]);
        for (z, d) in rest.iter().zip(direction) {
            if *d > rounding {
                reach = reach.min((self.largest - z) / d);
            } else if *d < -rounding {
                reach = reach.min((self.smallest - z) / d);
            }
        }
        reach = reach.max(0.0);
        if !reach.is_finite() {
            return reach;
        }
        loop {
            let moved: Vec<f64> = rest
                .iter()
                .zip(direction)
                .map(|(z, d)| z + reach * d)
                .collect();
            let mut nearest = reach;
            // room left and speed towards the facet of the m largest coordinates
            let (mut room, mut speed) = (0.0, 0.0);
            for (&i, value) in ranking(&moved, 0).iter().zip(&self.decreasing) {
                room += value - rest[i];
                speed += direction[i];
                if speed > rounding && room < nearest * speed {
                    nearest = (room / speed).max(0.0);
                }
            }
            if nearest >= reach * (1.0 - f64::EPSILON) {
                return reach;
            }
            reach = nearest;
        }
    }
}

/// Positions (counted from `start`) by decreasing value.
fn ranking(values: &[f64], start: usize) -> Vec<usize> {
    let mut order: Vec<usize> = (start..start + values.len()).collect();
    order.sort_by(|&a, &b| {
        values[b - start]
            .total_cmp(&values[a - start])
            .then(a.cmp(&b))
    });
    order
}

#[cfg(test)]
mod tests {
    use super::*;
    use rand::{Rng, SeedableRng};
    use rand_chacha::ChaCha8Rng;

    #[test]
    fn mixtures_of_permutations_are_recovered() {
        let mut generator = ChaCha8Rng::seed_from_u64(5);
        for size in [1usize, 2, 3, 7, 20, 60] {
            for ties in [false, true] {
                let values: Vec<f64> = (0..size)
                    .map(|_| {
                        let v: f64 = generator.random();
                        if ties { (3.0 * v).floor() } else { v }
                    })
                    .collect();
                let mut links: Vec<bool> = (0..size).map(|_| generator.random_bool(0.8)).collect();
                links[size - 1] = false;
                let mut point = values.clone();
                for span in blocks(&links) {
                    // averaging pairs stays inside the permutahedron
                    for _ in 0..2 * span.len() {
                        let i = generator.random_range(span.clone());
                        let j = generator.random_range(span.clone());
                        let share: f64 = generator.random();
                        let (a, b) = (point[i], point[j]);
                        point[i] = share * a + (1.0 - share) * b;
                        point[j] = share * b + (1.0 - share) * a;
                    }
                }
                let mixture = decompose(&point, &values, &links);
                assert!(mixture.len() <= size + 1);
                for i in 0..size {
                    let value: f64 = mixture
                        .iter()
                        .map(|p| p.probability * values[p.order[i]])
                        .sum();
                    assert!((value - point[i]).abs() < 1e-13, "{value} {}", point[i]);
                }
            }
        }
    }
}

//! Polyhedral cones by the double description, in exact integers.

use super::refusal::too_large;
use crate::error::Result;
use std::sync::Arc;

/// Bits of an [`Incidence`].
const CAPACITY: usize = 256;

/// The inequalities that hold with equality on a ray.
#[derive(Debug, Clone, Copy, PartialEq, Eq)]
struct Incidence([u64; CAPACITY / 64]);

impl Incidence {
    fn all_but(dimension: usize, missing: usize) -> Self {
        let mut bits = Incidence([0; CAPACITY / 64]);
        for k in (0..dimension).filter(|&k| k != missing) {
            bits.insert(k);
        }
        bits
    }

    fn insert(&mut self, k: usize) {
        self.0[k / 64] |= 1 << (k % 64);
    }

    fn intersection(&self, other: &Self) -> Self {
        Incidence(std::array::from_fn(|i| self.0[i] & other.0[i]))
    }

    fn contains(&self, other: &Self) -> bool {
        self.0.iter().zip(&other.0).all(|(a, b)| b & !a == 0)
    }

    fn count(&self) -> usize {
        self.0.iter().map(|word| word.count_ones() as usize).sum()
    }
}

#[derive(Debug, Clone)]
struct Ray {
    direction: Arc<[i64]>,
    tight: Incidence,
}

/// A pointed, full-dimensional cone, given by its extremal rays (primitive integer vectors).
#[derive(Debug, Clone)]
pub(super) struct Cone {
    dimension: usize,
    inequalities: usize,
    rays: Vec<Ray>,
}

impl Cone {
    /// All vectors with nonnegative components.
    ///
    /// # Errors
    /// Beyond the dimensions that lists can be made for.
    pub(super) fn orthant(dimension: usize) -> Result<Self> {
        if dimension > CAPACITY / 2 {
            return Err(too_large(format!(
                "{dimension} one-particle energies that matter"
            )));
        }
        let unit = |k| (0..dimension).map(|i| i64::from(i == k)).collect();
        Ok(Cone {
            dimension,
            inequalities: dimension,
            rays: (0..dimension)
                .map(|k| Ray {
                    direction: unit(k),
                    tight: Incidence::all_but(dimension, k),
                })
                .collect(),
        })
    }

    /// The extremal rays.
    pub(super) fn rays(&self) -> impl Iterator<Item = &Arc<[i64]>> {
        self.rays.iter().map(|ray| &ray.direction)
    }

    /// Memory held by the cone if it shared no ray with others.
    pub(super) fn bytes(&self) -> usize {
        self.rays.len() * (size_of::<Ray>() + self.dimension * size_of::<i64>())
    }

    /// Keeps the vectors s with `<normal, s>` <= 0; `false` if no interior is left.
    ///
    /// # Errors
    /// If the description outgrows its integers or its bits.
    pub(super) fn cut(&mut self, normal: &[i64]) -> Result<bool> {
        let values: Vec<i64> = self.rays().map(|ray| product(normal, ray)).collect();
        if values.iter().all(|&value| value <= 0) {
            return Ok(values.iter().any(|&v| v < 0) || normal.iter().all(|&x| x == 0));
        }
        if values.iter().all(|&value| value >= 0) {
            return Ok(false);
        }
        if self.inequalities == CAPACITY {
            return Err(too_large(format!("a cone with more than {CAPACITY} walls")));
        }
        let wall = self.inequalities;
        let mut on_wall = self.edges_across(&values)?;
        for ray in &mut on_wall {
            ray.tight.insert(wall);
        }
        self.inequalities += 1;
        let mut values = values.into_iter();
        self.rays.retain_mut(|ray| {
            let value = values.next().unwrap_or(0);
            if value == 0 {
                ray.tight.insert(wall);
            }
            value <= 0
        });
        self.rays.append(&mut on_wall);
        Ok(true)
    }

    /// Where the two-dimensional faces between rays of positive and negative value cross zero.
    fn edges_across(&self, values: &[i64]) -> Result<Vec<Ray>> {
        let mut crossings = Vec::new();
        for (above, _) in values.iter().enumerate().filter(|(_, v)| **v > 0) {
            for (below, _) in values.iter().enumerate().filter(|(_, v)| **v < 0) {
                let (p, q) = (&self.rays[above], &self.rays[below]);
                let common = p.tight.intersection(&q.tight);
                let adjacent =
                    common.count() + 2 >= self.dimension
                        && self.rays.iter().enumerate().all(|(k, ray)| {
                            k == above || k == below || !ray.tight.contains(&common)
                        });
                if adjacent {
                    crossings.push(Ray {
                        direction: combination(
                            values[above],
                            &q.direction,
                            -values[below],
                            &p.direction,
                        )?,
                        tight: common,
                    });
                }
            }
        }
        Ok(crossings)
    }
}

fn product(a: &[i64], b: &[i64]) -> i64 {
    a.iter().zip(b).map(|(x, y)| x * y).sum()
}

/// The primitive multiple of a x + b y.
fn combination(a: i64, x: &[i64], b: i64, y: &[i64]) -> Result<Arc<[i64]>> {
    let sums: Vec<i128> = x
        .iter()
        .zip(y)
        .map(|(&x, &y)| i128::from(a) * i128::from(x) + i128::from(b) * i128::from(y))
        .collect();
    let divisor = sums
        .iter()
        .fold(0, |divisor, &sum| gcd(divisor, sum))
        .max(1);
    sums.iter()
        .map(|&sum| i32::try_from(sum / divisor).map(i64::from))
        .collect::<std::result::Result<_, _>>()
        .map_err(|_| too_large("normals with more than 31 bits".to_string()))
}

/// Greatest common divisor, nonnegative.
pub(super) fn gcd(a: i128, b: i128) -> i128 {
    let (mut a, mut b) = (a.abs(), b.abs());
    while b != 0 {
        (a, b) = (b, a % b);
    }
    a
}

#[cfg(test)]
mod tests {
    use super::*;

    fn sorted_rays(cone: &Cone) -> Vec<Vec<i64>> {
        let mut rays: Vec<Vec<i64>> = cone.rays().map(|ray| ray.to_vec()).collect();
        rays.sort();
        rays
    }

    #[test]
    fn cuts_of_the_positive_octant() {
        let mut cone = Cone::orthant(3).unwrap();
        assert!(cone.cut(&[1, -1, 0]).unwrap());
        let expected = [vec![0, 0, 1], vec![0, 1, 0], vec![1, 1, 0]];
        assert_eq!(sorted_rays(&cone), expected);
        assert!(cone.cut(&[1, 1, -1]).unwrap());
        let expected = [vec![0, 0, 1], vec![0, 1, 1], vec![1, 1, 2]];
        assert_eq!(sorted_rays(&cone), expected);
        assert!(!cone.clone().cut(&[-1, 0, 1]).unwrap());
        assert!(cone.cut(&[0, 0, 0]).unwrap());
    }

    #[test]
    fn a_square_cone_has_four_rays() {
        // x1 <= x3 and x2 <= x3 leave the cone over a unit square
        let mut cone = Cone::orthant(3).unwrap();
        assert!(cone.cut(&[1, 0, -1]).unwrap() && cone.cut(&[0, 1, -1]).unwrap());
        let expected = [vec![0, 0, 1], vec![0, 1, 1], vec![1, 0, 1], vec![1, 1, 1]];
        assert_eq!(sorted_rays(&cone), expected);
    }
}

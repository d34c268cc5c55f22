//! Dense least squares by Householder reflections, for columns that may be nearly dependent.

/// Relative remainder below which a column counts as dependent on those before it.
const DEPENDENT: f64 = 1e-12;

/// Columns of equal length, one after the other.
#[derive(Debug, Default)]
pub(super) struct Columns {
    pub rows: usize,
    pub data: Vec<f64>,
}

/// The minimiser of |rhs + sum_j x_j column_j| and the remainder there.
#[derive(Debug)]
pub(super) struct Minimum {
    /// Coefficients; zero for a column dependent on those before it.
    pub coefficients: Vec<f64>,
    /// rhs + sum_j x_j column_j, orthogonal to the columns to full relative precision.
    pub residual: Vec<f64>,
}

impl Columns {
    /// Solves the least-squares problem; the columns are overwritten.
    pub fn minimise(&mut self, mut rhs: Vec<f64>) -> Minimum {
        let rows = self.rows;
        let count = self.data.len().checked_div(rows).unwrap_or(0);
        // diagonal entry and column of each reflection
        let mut pivots: Vec<(usize, f64)> = Vec::with_capacity(count.min(rows));
        let mut scales: Vec<f64> = Vec::with_capacity(count);
        for j in 0..count {
            let (done, rest) = self.data.split_at_mut(j * rows);
            let column = &mut rest[..rows];
            let norm = dot(column, column).sqrt();
            scales.push(if norm > 0.0 { norm.recip() } else { 0.0 });
            column.iter_mut().for_each(|x| *x *= scales[j]);
            for (step, &(earlier, _)) in pivots.iter().enumerate() {
                reflect(
                    &done[earlier * rows + step..(earlier + 1) * rows],
                    &mut column[step..],
                );
            }
            let step = pivots.len();
            if step < rows
                && let Some(diagonal) = make_reflector(&mut column[step..])
            {
                pivots.push((j, diagonal));
            }
        }
        for (step, &(j, _)) in pivots.iter().enumerate() {
            reflect(
                &self.data[j * rows + step..(j + 1) * rows],
                &mut rhs[step..],
            );
        }
        let mut solution: Vec<f64> = rhs[..pivots.len()].iter().map(|x| -x).collect();
        let mut coefficients = vec![0.0; count];
        for (step, &(j, diagonal)) in pivots.iter().enumerate().rev() {
            let value = solution[step] / diagonal;
            coefficients[j] = value * scales[j];
            let above = &self.data[j * rows..j * rows + step];
            for (s, r) in solution.iter_mut().zip(above) {
                *s -= value * r;
            }
        }
        rhs[..pivots.len()].fill(0.0);
        for (step, &(j, _)) in pivots.iter().enumerate().rev() {
            reflect(
                &self.data[j * rows + step..(j + 1) * rows],
                &mut rhs[step..],
            );
        }
        Minimum {
            coefficients,
            residual: rhs,
        }
    }
}

/// Turns a column of at most unit length into the unit vector u of the reflection 1 - 2 u u^T
/// that takes it to a multiple of the first axis, and returns that multiple.
fn make_reflector(column: &mut [f64]) -> Option<f64> {
    let norm = dot(column, column).sqrt();
    if norm <= DEPENDENT {
        return None;
    }
    let diagonal = if column[0] > 0.0 { -norm } else { norm };
    column[0] -= diagonal;
    let length = dot(column, column).sqrt();
    column.iter_mut().for_each(|x| *x /= length);
    Some(diagonal)
}

fn reflect(unit: &[f64], vector: &mut [f64]) {
    let twice = 2.0 * dot(unit, vector);
    for (x, u) in vector.iter_mut().zip(unit) {
        *x -= twice * u;
    }
}

/// Scalar product, summed in four lanes.
pub(super) fn dot(a: &[f64], b: &[f64]) -> f64 {
    let mut lanes = [0.0; 4];
    let (a4, b4) = (a.chunks_exact(4), b.chunks_exact(4));
    let tail: f64 = a4
        .remainder()
        .iter()
        .zip(b4.remainder())
        .map(|(x, y)| x * y)
        .sum();
    for (x, y) in a4.zip(b4) {
        for lane in 0..4 {
            lanes[lane] += x[lane] * y[lane];
        }
    }
    lanes.iter().sum::<f64>() + tail
}

#[cfg(test)]
mod tests {
    use super::*;
    use approx::assert_abs_diff_eq;

    #[test]
    fn the_residual_is_orthogonal_and_dependent_columns_are_left_out() {
        let data = vec![1.0, 2.0, 0.5, -1.0, 2.0, 4.0, 1.0, -2.0, 0.0, 1.0, 1.0, 3.0];
        let original = data.clone();
        let mut columns = Columns { rows: 4, data };
        let rhs = vec![1.0, -2.0, 3.0, 0.5];
        let minimum = columns.minimise(rhs.clone());
        assert_eq!(minimum.coefficients[1], 0.0);
        for (i, right) in rhs.iter().enumerate() {
            let value = right
                + (0..3)
                    .map(|j| minimum.coefficients[j] * original[4 * j + i])
                    .sum::<f64>();
            assert_abs_diff_eq!(value, minimum.residual[i], epsilon = 1e-14);
        }
        for column in original.chunks(4) {
            assert_abs_diff_eq!(dot(column, &minimum.residual), 0.0, epsilon = 1e-14);
        }
    }
}

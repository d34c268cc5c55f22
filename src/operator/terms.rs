//! One- and two-body terms of one kind of particles, brought to normal order with each
//! distinct term once.

use super::interaction::Interaction;
use super::walker::Walker;
use crate::scalar::Scalar;
use ndarray::{Array2, ArrayView2, s};
use std::ops::Range;

/// H of one spin component (or of bosons) as a diagonal, hops and pair hops.
#[derive(Debug, Clone)]
pub struct ModeTerms<T> {
    /// Coefficient of n_p.
    level: Vec<f64>,
    /// Coefficient of n_p n_q for p < q, and of n_p (n_p - 1) / 2 on the diagonal.
    density: Array2<f64>,
    /// For each annihilated mode q: created modes p != q and the coefficient.
    hops: Vec<Vec<(usize, T)>>,
    /// For each annihilated pair r <= s, at r * modes + s: created pairs and the coefficient.
    pair_hops: Vec<Vec<([usize; 2], T)>>,
    has_pair_hops: bool,
}

impl<T: Scalar> ModeTerms<T> {
    /// Collects the terms of h and, if there is one, of the interaction between like particles.
    pub fn new(
        one_body: ArrayView2<'_, T>,
        interaction: Option<&Interaction<T>>,
        fermionic: bool,
    ) -> Self {
        let modes = one_body.nrows();
        let mut terms = ModeTerms {
            level: one_body.diag().iter().map(|x| x.re()).collect(),
            density: Array2::zeros((modes, modes)),
            hops: vec![Vec::new(); modes],
            pair_hops: vec![Vec::new(); modes * modes],
            has_pair_hops: false,
        };
        for ((p, q), &value) in one_body.indexed_iter() {
            if p != q && value != T::zero() {
                terms.hops[q].push((p, value));
            }
        }
        if let Some(interaction) = interaction {
            if let Some(v) = interaction.density_density() {
                terms.density += v;
            }
            if interaction.tensor().is_some() {
                terms.collect_all_pairs(interaction, fermionic);
            } else {
                terms.collect_listed_pairs(interaction, fermionic);
            }
        }
        terms.has_pair_hops = terms.pair_hops.iter().any(|list| !list.is_empty());
        terms
    }

    /// Coefficients of n_p n_q for p < q, and of n_p (n_p - 1) / 2 on the diagonal.
    pub fn density(&self) -> &Array2<f64> {
        &self.density
    }

    /// Coefficient of a+_p a_q for p != q.
    pub fn hop_amplitude(&self, p: usize, q: usize) -> T {
        let listed = self.hops[q].iter().find(|(created, _)| *created == p);
        listed.map_or(T::zero(), |&(_, value)| value)
    }

    /// One-body terms and density couplings within a range of modes, counted from its start.
    pub fn within(&self, modes: Range<usize>) -> Self {
        let count = modes.len();
        let inside = |list: &Vec<(usize, T)>| {
            list.iter()
                .filter(|(p, _)| modes.contains(p))
                .map(|&(p, value)| (p - modes.start, value))
                .collect()
        };
        ModeTerms {
            level: self.level[modes.clone()].to_vec(),
            density: self
                .density
                .slice(s![modes.clone(), modes.clone()])
                .to_owned(),
            hops: self.hops[modes.clone()].iter().map(inside).collect(),
            pair_hops: vec![Vec::new(); count * count],
            has_pair_hops: false,
        }
    }

    fn collect_all_pairs(&mut self, interaction: &Interaction<T>, fermionic: bool) {
        let modes = self.level.len();
        let pairs: Vec<[usize; 2]> = (0..modes)
            .flat_map(|p| (p + usize::from(fermionic)..modes).map(move |q| [p, q]))
            .collect();
        for &annihilated in &pairs {
            for &created in &pairs {
                self.add_pair(interaction, created, annihilated, fermionic);
            }
        }
    }

    fn collect_listed_pairs(&mut self, interaction: &Interaction<T>, fermionic: bool) {
        let ordered = |a: usize, b: usize| [a.min(b), a.max(b)];
        let mut pairs: Vec<[[usize; 2]; 2]> = interaction
            .entries()
            .map(|([p, q, r, s], _)| [ordered(r, s), ordered(p, q)])
            .collect();
        pairs.sort_unstable();
        pairs.dedup();
        for [annihilated, created] in pairs {
            let vanishes = annihilated[0] == annihilated[1] || created[0] == created[1];
            if !(fermionic && vanishes) {
                self.add_pair(interaction, created, annihilated, fermionic);
            }
        }
    }

    /// Adds the term of a+_p a+_q a_s a_r with p <= q, r <= s: all orderings of v summed up.
    fn add_pair(
        &mut self,
        interaction: &Interaction<T>,
        [p, q]: [usize; 2],
        [r, s]: [usize; 2],
        fermionic: bool,
    ) {
        let direct = interaction.element([p, q, r, s]);
        let exchanged = interaction.element([p, q, s, r]);
        let value = if fermionic {
            direct - exchanged
        } else {
            match (p == q, r == s) {
                (false, false) => direct + exchanged,
                (true, true) => direct * 0.5,
                _ => direct,
            }
        };
        if value == T::zero() {
            return;
        }
        if [p, q] == [r, s] {
            // n_p (n_p - 1) / 2 carries the factor 1/2 already
            let factor = if p == q { 2.0 } else { 1.0 };
            self.density[[p, q]] += factor * value.re();
        } else {
            self.pair_hops[r * self.level.len() + s].push(([p, q], value));
        }
    }

    /// The diagonal matrix element of a configuration.
    #[inline]
    pub fn diagonal(&self, walker: &Walker<'_>) -> f64 {
        let (occupied, occupations) = (walker.occupied(), walker.occupations());
        let count = |mode: u32| f64::from(occupations[mode as usize]);
        let mut sum = 0.0;
        for (i, &p) in occupied.iter().enumerate() {
            let (n, row) = (count(p), self.density.row(p as usize));
            let others = occupied[i + 1..].iter();
            let felt: f64 = others.map(|&q| row[q as usize] * count(q)).sum();
            let own = row[p as usize] * (n - 1.0) / 2.0;
            sum += n * (self.level[p as usize] + felt + own);
        }
        sum
    }

    /// Calls `visit(J, <J|H|I>)` for the off-diagonal elements of the walker's configuration I;
    /// an index J may come more than once, its contributions add up.
    #[inline]
    pub fn visit_off_diagonal(&self, walker: &Walker<'_>, mut visit: impl FnMut(usize, T)) {
        let (occupied, occupations) = (walker.occupied(), walker.occupations());
        let n = self.level.len();
        for &q in occupied {
            let q = q as usize;
            for &(p, value) in &self.hops[q] {
                if let Some((index, factor)) = walker.hop(p, q) {
                    visit(index, value * factor);
                }
            }
        }
        if !self.has_pair_hops {
            return;
        }
        for (i, &r) in occupied.iter().enumerate() {
            let r = r as usize;
            // two particles of one mode: bosons only
            let first = if occupations[r] > 1 { i } else { i + 1 };
            for &s in &occupied[first..] {
                let pair = [r, s as usize];
                for &(created, value) in &self.pair_hops[r * n + pair[1]] {
                    if let Some((index, factor)) = walker.pair_hop(created, pair) {
                        visit(index, value * factor);
                    }
                }
            }
        }
    }
}

//! Counts and inequalities as published, and how they read.

use super::{bosons, decreasing, fermions, line_ups, spin_half};
use crate::polytope::Domain::{self, SpinResolved, Spinless};
use crate::polytope::exact::Inequality;
use crate::sector::Sector;
use crate::weights::Weights;
use ndarray::array;

/// Counts for strictly decreasing weights in the stable range, r = 1, 2, ...: the table of Ann.
/// Henri Poincare 24, 2241 (2023), arXiv:2105.06459 (fermions, n_d >= 0 not counted) and
/// arXiv:2204.12715 (bosons, n_d >= 0 counted). The numbers here come from two independent
/// computations and agree with what is commonly quoted to r = 5; beyond, not compared with print.
const FERMION_VERTICES: [usize; 12] = [1, 1, 2, 4, 10, 28, 90, 312, 1160, 4518, 18008, 73224];
const FERMION_INEQUALITIES: [usize; 12] = [1, 2, 3, 5, 8, 13, 23, 42, 88, 203, 486, 1257];
const BOSON_VERTICES: [usize; 12] = [1, 1, 2, 4, 8, 17, 37, 82, 184, 418, 967, 2278];
const BOSON_INEQUALITIES: [usize; 12] = [1, 2, 3, 5, 8, 13, 22, 36, 59, 99, 171, 299];

#[test]
fn published_counts_to_twelve() {
    for r in 1..=12 {
        let n = (r - 1).max(2);
        let fermions = line_ups(fermions(2 * n, n), &decreasing(r), Spinless);
        assert_eq!(fermions.count(), FERMION_VERTICES[r - 1]);
        let listed = fermions.inequalities().unwrap();
        let counted = listed
            .iter()
            .filter(|inequality| !inequality.positivity)
            .count();
        assert_eq!(counted, FERMION_INEQUALITIES[r - 1]);
        let bosons = line_ups(bosons(r.max(3), n), &decreasing(r), Spinless);
        assert_eq!(bosons.count(), BOSON_VERTICES[r - 1]);
        assert_eq!(
            bosons.inequalities().unwrap().len(),
            BOSON_INEQUALITIES[r - 1]
        );
        // the last level adds exactly what the counts differ by
        if r > 2 {
            let added = bosons.new_at(r).unwrap().len();
            assert_eq!(added, BOSON_INEQUALITIES[r - 1] - BOSON_INEQUALITIES[r - 2]);
        }
    }
}

#[test]
fn the_stable_range_does_not_depend_on_particles_and_modes() {
    let small = line_ups(fermions(14, 7), &decreasing(8), Spinless);
    let large = line_ups(fermions(100_000, 40_000), &decreasing(8), Spinless);
    assert_eq!(small.count(), large.count());
    assert_eq!(small.rays, large.rays);
}

/// Line-ups of spin-1/2 fermions for r = 1, 2, 3 and 4: Quantum 9, 1921 (2025), recomputed.
#[test]
fn spin_half_counts() {
    for (r, count) in [(1, 1), (2, 2), (3, 6), (4, 18)] {
        let found = line_ups(spin_half(4, 2, 2), &decreasing(r), SpinResolved);
        assert_eq!(found.count(), count);
    }
    assert_eq!(
        line_ups(spin_half(6, 3, 3), &decreasing(4), SpinResolved).count(),
        22
    );
}

fn sentences(sector: Sector, weights: &[f64], domain: Domain) -> Vec<String> {
    let weights = Weights::new(weights).unwrap();
    let list = line_ups(sector, &weights, domain).inequalities().unwrap();
    list.iter().map(Inequality::sentence).collect()
}

/// The inequalities for r <= 4 as published (arXiv:2105.06459, arXiv:2204.12715 and, for
/// spin-1/2 with r <= 3, Quantum 9, 1921 (2025)), in a form with nonnegative weights.
#[test]
fn published_inequalities() {
    let expected = [
        "n8 >= 0",
        "n1 <= 1",
        "n1 + n2 + n3 + n4 <= N - 1 + w1 = 3.4",
        "2(n1 + n2 + n3) + n4 + n5 <= 2 N - 2 + w1 + w2 = 6.7",
        "2(n1 + n2) + n3 + n4 + n5 <= 2 N - 3 + w1 + w2 + w3 = 5.9",
        "2(n1 + n2 + n3) + n4 + n5 + n6 <= 2 N - 2 + w1 + w2 + w3 = 6.9",
    ];
    assert_eq!(
        sentences(fermions(8, 4), &[0.4, 0.3, 0.2, 0.1], Spinless),
        expected
    );
    let expected = [
        "n5 >= 0",
        "n1 <= N - 1 + w1 = 3.4",
        "2 n1 + n2 <= 2 N - 2 + 2 w1 + w2 = 7.1",
        "2 n1 + n2 + n3 <= 2 N - 2 + 2 w1 + w2 + w3 = 7.3",
        "3 n1 + 2 n2 <= 3 N - 3 + 3 w1 + 2 w2 + w3 = 11",
    ];
    assert_eq!(
        sentences(bosons(5, 4), &[0.4, 0.3, 0.2, 0.1], Spinless),
        expected
    );
    let expected = [
        "n4(up) >= 0",
        "n4(down) >= 0",
        "n1(down) <= 1",
        "n1(up) <= 1",
        "n1(up) + n2(up) + n1(down) + n2(down) <= N_up + N_down - 1 + w1 = 3.5",
        "n1(up) + n2(up) + 2 n1(down) + n2(down) + n3(down) <= N_up + 2 N_down - 2 + w1 + w2 = 4.8",
        "2 n1(up) + n2(up) + n3(up) + n1(down) + n2(down) <= 2 N_up + N_down - 2 + w1 + w2 = 4.8",
    ];
    assert_eq!(
        sentences(spin_half(4, 2, 2), &[0.5, 0.3, 0.2], SpinResolved),
        expected
    );
}

#[test]
fn equal_weights_drop_the_inequalities_between_their_levels() {
    let found = sentences(fermions(8, 4), &[0.25; 4], Spinless);
    assert!(found.contains(&"n1 + n2 + n3 + n4 <= N - 1 + w1 = 3.25".to_string()));
    assert!(
        !found
            .iter()
            .any(|sentence| sentence.starts_with("2(n1 + n2 + n3) + n4 + n5 <="))
    );
    // one particle: w1 = w2 = 1/2 is n_1 <= 1/2; differences below 1e-12 do not matter
    assert_eq!(
        sentences(fermions(3, 1), &[0.5 + 1e-15, 0.5 - 1e-15], Spinless).len(),
        1
    );
}

#[test]
fn latex_and_long_sums() {
    let weights = decreasing(2);
    let list = line_ups(fermions(40, 20), &weights, Spinless)
        .inequalities()
        .unwrap();
    assert_eq!(
        list[2].sentence(),
        "n1 + ... + n20 <= N - 1 + w1 = 19.6666666667"
    );
    assert_eq!(
        list[2].latex(),
        r"n_{1} + \cdots + n_{20} \leq N - 1 + w_{1} = 19.6666666667"
    );
    assert_eq!(list[0].latex(), r"n_{40} \geq 0");
    let list = line_ups(spin_half(3, 1, 1), &weights, SpinResolved)
        .inequalities()
        .unwrap();
    assert!(list.iter().any(|x| {
        x.latex()
            .starts_with(r"n_{1\uparrow} + n_{1\downarrow} \leq")
    }));
}

#[test]
fn domains_of_one_point() {
    let list = sentences(fermions(3, 3), &[1.0], Spinless);
    assert_eq!(list, ["n1 <= 1"]);
    assert_eq!(
        sentences(bosons(3, 1), &[1.0 / 3.0; 3], Spinless),
        ["3 n1 <= 1"]
    );
    assert_eq!(sentences(bosons(1, 4), &[1.0], Spinless), ["n1 <= 4"]);
    let empty = line_ups(fermions(3, 0), &decreasing(1), Spinless);
    let vertices = empty.generating_vertices().unwrap();
    assert_eq!(vertices[0].occupations, array![[0.0, 0.0, 0.0]]);
    assert!(
        empty.inequalities().unwrap()[0]
            .slack(array![[0.1, 0.0, 0.0]].view())
            .unwrap()
            < 0.0
    );
}

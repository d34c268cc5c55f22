use super::*;

/// Membership by the list of inequalities and by projection.
fn assert_list_is_complete(generator: &mut ChaCha8Rng, polytope: &ExclusionPolytope) {
    let list = polytope.inequalities().unwrap();
    for _ in 0..30 {
        let size = generator.random::<f64>() * 3.0;
        let n = random_point(generator, polytope, size);
        // on the boundary of the list: all slacks non-negative, one zero
        let centre = uniform(polytope);
        let mut reach = f64::INFINITY;
        for inequality in &list {
            let at_centre = inequality.slack(centre.view()).unwrap();
            let change = at_centre - inequality.slack(n.view()).unwrap();
            if change > 1e-12 {
                reach = reach.min(at_centre / change);
            }
        }
        let stretch = polytope.stretch(n.view()).unwrap();
        assert!(
            (stretch.value - reach).abs() < 1e-10 * reach,
            "{:?}: list {reach}, stretch {}",
            polytope.sector(),
            stretch.value
        );
        let (tightest, slack) = polytope.tightest(stretch.boundary.view()).unwrap();
        assert!(slack.abs() < 1e-11, "{tightest} {slack:e}");
        let met = stretch.inequality.unwrap();
        assert!(
            met.slack(stretch.boundary.view()).unwrap().abs() < 1e-11,
            "{met}"
        );
        let inside = list.iter().all(|i| i.slack(n.view()).unwrap() >= 0.0);
        assert_eq!(inside, project(polytope, &n).distance <= 1e-10);
    }
}

#[test]
fn inequalities_describe_the_same_set_as_the_oracle() {
    let mut generator = generator(8);
    for count in 1..=4 {
        for sector in [
            Sector::fermions(6, 3),
            Sector::fermions(7, 3),
            Sector::fermions(2 * count, count.max(2) - 1),
            Sector::bosons(4, 3),
            Sector::bosons(5, 4),
            Sector::spin_half(4, 2, 2),
            Sector::spin_half(5, 2, 3),
            Sector::spin_half(4, 1, 3),
            Sector::spin_half(2, 1, 1),
        ] {
            let sector = sector.unwrap();
            let weights = random_weights(&mut generator, count);
            let polytope = ExclusionPolytope::new(sector, weights, domains(&sector)[0]).unwrap();
            if polytope.inequalities().is_ok() {
                assert_list_is_complete(&mut generator, &polytope);
            }
        }
    }
}

/// Bounds of design tables in closed form: Ann. Henri Poincare 24, 2241 (2023), arXiv:2204.12715
/// and Quantum 9, 1921 (2025) (recalled).
#[test]
fn bounds_agree_with_the_published_forms() {
    let w = [0.4, 0.3, 0.2, 0.1];
    let weights = Weights::new(&w).unwrap();
    let bounds = |sector: Sector, weights: &Weights, domain| -> Vec<f64> {
        let polytope = ExclusionPolytope::new(sector, weights.clone(), domain).unwrap();
        let list = polytope.inequalities().unwrap();
        list.iter().map(|inequality| inequality.bound).collect()
    };
    let close = |found: Vec<f64>, expected: &[f64]| {
        assert_eq!(found.len(), expected.len());
        for (a, b) in found.iter().zip(expected) {
            assert!((a - b).abs() < 1e-14, "{found:?} {expected:?}");
        }
    };
    let three = w[0] + w[1] + w[2];
    let fermions = bounds(Sector::fermions(8, 4).unwrap(), &weights, Domain::Spinless);
    let expected = [
        1.0,
        0.0,
        3.0 + w[0],
        6.0 + w[0] + w[1],
        6.0 + three,
        5.0 + three,
    ];
    close(fermions, &expected);
    let bosons = bounds(Sector::bosons(5, 4).unwrap(), &weights, Domain::Spinless);
    let expected = [
        0.0,
        3.0 + w[0],
        8.0 - w[1] - 2.0 * (w[2] + w[3]),
        8.0 - w[1] - w[2] - 2.0 * w[3],
        12.0 - w[1] - 2.0 * w[2] - 3.0 * w[3],
    ];
    close(bosons, &expected);
    let weights = Weights::new(&[0.5, 0.3, 0.2]).unwrap();
    let spin = bounds(
        Sector::spin_half(6, 3, 2).unwrap(),
        &weights,
        Domain::SpinResolved,
    );
    close(spin, &[1.0, 1.0, 0.0, 0.0, 4.5, 6.0 + 0.8, 5.0 + 0.8]);
}

#[test]
fn inequalities_read_well() {
    let sector = Sector::fermions(8, 4).unwrap();
    let weights = Weights::new(&[0.4, 0.3, 0.2, 0.1]).unwrap();
    let polytope = ExclusionPolytope::new(sector, weights, Domain::Spinless).unwrap();
    let list = polytope.inequalities().unwrap();
    let sentences: Vec<String> = list.iter().map(ToString::to_string).collect();
    assert_eq!(
        sentences,
        [
            "n1 <= 1",
            "n8 >= 0",
            "n1 + n2 + n3 + n4 <= 3.4 (= N - 1 + w1)",
            "2(n1 + n2 + n3) + n4 + n5 <= 6.7 (= 2N - 2 + w1 + w2)",
            "2(n1 + n2 + n3) + n4 + n5 + n6 <= 6.9 (= 2N - 2 + w1 + w2 + w3)",
            "2(n1 + n2) + n3 + n4 + n5 <= 5.9 (= 2N - 3 + w1 + w2 + w3)",
        ]
    );
    assert!(list[1].is_positivity && !list[0].is_positivity);
    assert_eq!(list[5].first_weight_count, 4);
}

#[test]
fn lists_that_are_not_known_are_refused() {
    let refused = |sector: Sector, count: usize, domain| {
        let weights = Weights::new(&vec![1.0 / count as f64; count]).unwrap();
        let polytope = ExclusionPolytope::new(sector, weights, domain).unwrap();
        assert!(matches!(
            polytope.inequalities(),
            Err(Error::Argument { .. })
        ));
    };
    refused(Sector::fermions(10, 5).unwrap(), 5, Domain::Spinless);
    refused(Sector::fermions(10, 1).unwrap(), 3, Domain::Spinless);
    refused(Sector::bosons(3, 5).unwrap(), 4, Domain::Spinless);
    refused(Sector::spin_half(6, 3, 3).unwrap(), 4, Domain::SpinResolved);
    refused(Sector::spin_half(6, 3, 3).unwrap(), 2, Domain::SpinSummed);
}

use super::*;

#[test]
fn stretched_points_lie_on_the_boundary() {
    let mut generator = generator(7);
    for polytope in small_polytopes(&mut generator) {
        for size in [0.01, 1.0, 5.0] {
            let n = random_point(&mut generator, &polytope, size);
            let stretch = polytope.stretch(n.view()).unwrap();
            if length(&(&n - &uniform(&polytope))) < 1e-14 {
                assert_eq!(stretch.value, f64::INFINITY);
                continue;
            }
            assert!(stretch.lower <= stretch.value);
            assert!(
                stretch.value - stretch.lower <= 1e-11 * stretch.value,
                "{stretch:?}"
            );
            let at = |t: f64| &uniform(&polytope) + &((&n - &uniform(&polytope)) * t);
            if stretch.value > 0.0 {
                assert!(project(&polytope, &at(stretch.value)).distance < 1e-12);
                let beyond = project(&polytope, &at(stretch.value * (1.0 + 1e-6)));
                assert!(
                    beyond.distance_lower > 0.0,
                    "{n} {stretch:?} {:?}",
                    polytope.weights()
                );
                let support = enumerated_support(&polytope, &stretch.normal);
                let value = (&stretch.normal * &stretch.boundary).sum();
                assert!((support - value).abs() < 1e-12 * length(&stretch.normal).max(1.0));
            }
            let inside = project(&polytope, &n).distance < 1e-12;
            assert_eq!(inside, stretch.value >= 1.0);
        }
    }
}

#[test]
fn spins_that_share_an_excitation_are_stretched_together() {
    // equal weights of two states: either spin alone can be uniform, not both
    let sector = Sector::spin_half(2, 1, 1).unwrap();
    let weights = Weights::new(&[0.5, 0.5]).unwrap();
    let polytope = ExclusionPolytope::new(sector, weights, Domain::SpinResolved).unwrap();
    let n = array![[0.5, 0.5], [0.6, 0.4]];
    let stretch = polytope.stretch(n.view()).unwrap();
    assert!((stretch.value - 5.0).abs() < 1e-12);
    let n = array![[0.7, 0.3], [0.6, 0.4]];
    let stretch = polytope.stretch(n.view()).unwrap();
    assert!((stretch.value - 0.5 / 0.3).abs() < 1e-12);
}

#[test]
fn one_point_polytopes_have_no_stretch() {
    let sector = Sector::fermions(3, 1).unwrap();
    let weights = Weights::new(&[1.0 / 3.0; 3]).unwrap();
    let point = ExclusionPolytope::new(sector, weights, Domain::Spinless).unwrap();
    let centre = Array2::from_elem((1, 3), 1.0 / 3.0);
    assert_eq!(point.stretch(centre.view()).unwrap().value, f64::INFINITY);
    let n = array![[0.5, 0.3, 0.2]];
    assert_eq!(point.stretch(n.view()).unwrap().value, 0.0);
    assert!(length(&(project(&point, &n).occupations - centre)) < 1e-15);
    assert!(point.stretch(array![[0.5, 0.5, 0.5]].view()).is_err());
}

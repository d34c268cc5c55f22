use super::*;
use crate::progress::silent;

fn inequalities(polytope: &ExclusionPolytope) -> Vec<Inequality> {
    let all = polytope.line_ups(DEFAULT_LIMIT, &mut silent).unwrap();
    all.inequalities().unwrap()
}

/// Membership by the list of inequalities and by projection.
fn assert_list_is_complete(generator: &mut ChaCha8Rng, polytope: &ExclusionPolytope) {
    let list = inequalities(polytope);
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
        let slacks = list
            .iter()
            .map(|i| i.slack(stretch.boundary.view()).unwrap());
        let least = slacks.fold(f64::INFINITY, f64::min);
        assert!(least.abs() < 1e-11, "{least:e}");
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
            for domain in domains(&sector) {
                let polytope = ExclusionPolytope::new(sector, weights.clone(), domain).unwrap();
                assert_list_is_complete(&mut generator, &polytope);
            }
        }
    }
}

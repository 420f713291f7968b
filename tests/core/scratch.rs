use crate::reference::{number, rows};
use std::collections::BTreeMap;
use tailcast::evaluate::{OriginRequest, answer};
use tailcast::fit::FitRequest;
use tailcast::model::*;

#[test]
fn scratch() {
    for (file, column, thresholds) in
        [("debian", 1, vec![5, 10, 20, 50, 100, 200, 500, 1000, 2000]), ("answers", 0, vec![5, 10, 20, 50, 100, 200])]
    {
        let mut by_date: BTreeMap<String, Vec<(u64, u64)>> = BTreeMap::new();
        for row in rows(&format!("../../examples/data/{file}/degree_counts.csv")) {
            by_date
                .entry(row[column].clone())
                .or_default()
                .push((number(&row[column + 1]) as u64, number(&row[column + 2]) as u64));
        }
        let dated = |d: &str| if d.contains('T') { d.to_owned() } else { format!("{d}T00:00:00Z") };
        let all: Vec<Snapshot> = by_date
            .into_iter()
            .map(|(d, p)| Snapshot { as_of: dated(&d).parse().unwrap(), counts: DegreeCounts::from_pairs(&p).unwrap() })
            .collect();
        for ahead in [1usize, 2, 3] {
            let (mut err, mut n, mut trend) = (0.0, 0.0, 0.0);
            let mut cover = [0.0; 2];
            for i in 1..all.len() - ahead.min(all.len() - 2) {
                if i + ahead >= all.len() {
                    continue;
                }
                let target = &all[i + ahead];
                let evidence = Evidence::new(DegreeKind::Received, all[i - 1..=i].to_vec(), None).unwrap();
                let now = &all[i];
                let days = days_between(now.as_of, target.as_of);
                // true arrivals and landings
                let per_day = (target.counts.nodes() - now.counts.nodes()) as f64 / days;
                let links = (target.counts.link_ends() - now.counts.link_ends()) as f64
                    / (target.counts.nodes() - now.counts.nodes()) as f64;
                let plan = ForecastPlan::new(
                    now.as_of,
                    Thresholds::new(&thresholds).unwrap(),
                    &[target.as_of],
                    Levels::default(),
                )
                .unwrap();
                let request = OriginRequest {
                    evidence,
                    fit: FitRequest { links_per_arrival: Some(links), ..Default::default() },
                    arrivals: Some(ArrivalPlan::constant(per_day).unwrap()),
                    links_per_node_day: 0.0,
                    plan,
                };
                let clock = std::time::Instant::now();
                let a = answer(&request, &|| false).unwrap();
                let took = clock.elapsed();
                let mut line = String::new();
                for t in &a.forecast[0].tail {
                    let observed = target.counts.tail_size(t.threshold) as f64;
                    let past = all[i - 1].counts.tail_size(t.threshold) as f64;
                    let s = now.counts.tail_size(t.threshold) as f64;
                    let k = |x: usize| all[x].counts.link_ends() as f64;
                    let tr = s + (s - past) * (k(i + ahead) - k(i)) / (k(i) - k(i - 1));
                    if observed >= 5.0 {
                        err += (t.size.expected / observed).ln().abs();
                        n += 1.0;
                        trend += (tr.max(1.0) / observed).ln().abs();
                        for (c, iv) in cover.iter_mut().zip(&t.size.intervals) {
                            if iv.low <= observed && observed <= iv.high {
                                *c += 1.0;
                            }
                        }
                    }
                    line += &format!(
                        "{}: {:.0} [{:.0},{:.0}] saw {} tr {:.0} | ",
                        t.threshold, t.size.expected, t.size.intervals[1].low, t.size.intervals[1].high, observed, tr
                    );
                }
                if ahead == 1 {
                    println!(
                        "{file} {i}+{ahead} p {:.3} {took:?} max {:?} saw {} {line}",
                        a.fit.preferential_share.value,
                        a.forecast[0].largest_degree,
                        target.counts.largest()
                    );
                }
            }
            println!(
                "{file} ahead {ahead}: err {:.4} trend {:.4} cover {:?} n {n}",
                err / n,
                trend / n,
                cover.map(|c| c / n)
            );
        }
    }
}

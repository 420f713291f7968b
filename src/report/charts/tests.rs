//! What is drawn, read back from the picture.

use proptest::prelude::*;
use roxmltree::{Document, Node};
use serde_json::{Value, json};

use super::canvas::{FINE, HEIGHT, WIDTH};
use super::words::{date_at, days};
use super::*;

/// A tail at a date: threshold, now, median, low and high of a 90 % interval.
type Tail = (u64, f64, f64, f64, f64);

fn forecast(
    label: &str,
    history: &[(&str, &[(u64, u64)])],
    ahead: &[(&str, &[Tail])],
    extra: &Value,
) -> ForecastAnswer {
    let tail = |(threshold, now, median, low, high): &Tail| {
        json!({ "threshold": threshold, "now": now, "expected": median, "median": median,
                "intervals": [{ "level": 0.9, "low": low, "high": high }] })
    };
    let none = json!({ "now": 1, "expected": 1.0, "median": 1.0, "intervals": [] });
    let mut document = json!({
        "label": label, "engine": "tailcast", "seed": 1, "inputs_digest": "",
        "fit": { "model": "mix", "evidence": "given", "preferential_share": { "estimate": 0.5 },
                 "links_per_arrival": { "estimate": 1.0 }, "entry_degrees": [], "candidates": [] },
        "history": history.iter().map(|(as_of, tail)| json!({ "as_of": as_of, "nodes": 9,
            "tail": tail.iter().map(|(threshold, nodes)| json!({ "threshold": threshold, "nodes": nodes })).collect::<Vec<_>>() }))
            .collect::<Vec<_>>(),
        "forecast": ahead.iter().map(|(date, tails)| json!({ "date": date, "nodes": none, "links": none,
            "largest_degree": none, "tail": tails.iter().map(tail).collect::<Vec<_>>() })).collect::<Vec<_>>(),
        "limits": [], "warnings": [], "cautions": [],
    });
    for (key, value) in extra.as_object().into_iter().flatten() {
        document[key.as_str()] = value.clone();
    }
    serde_json::from_value(document).unwrap()
}

/// Two snapshots and two dates at one threshold.
fn story() -> ForecastAnswer {
    forecast(
        "Heronsgate",
        &[("2026-01-01", &[(1000, 9)]), ("2026-06-01", &[(1000, 13)])],
        &[("2026-12-01", &[(1000, 13.0, 15.0, 12.0, 18.0)]), ("2027-08-01", &[(1000, 13.0, 16.0, 12.0, 21.0)])],
        &Value::Null,
    )
}

fn texts(svg: &str) -> Vec<(f64, f64, String)> {
    let document = Document::parse(svg).unwrap();
    let texts = document.descendants().filter(|node| node.has_tag_name("text"));
    texts.map(|node| (number(node, "x"), number(node, "y"), node.text().unwrap().trim().to_owned())).collect()
}

fn number(node: Node, name: &str) -> f64 {
    node.attribute(name).unwrap().parse().unwrap()
}

/// Where a tick's text stands.
fn tick(svg: &str, wanted: &str) -> (f64, f64) {
    let found = texts(svg).into_iter().find(|(_, _, text)| text == wanted);
    found.map(|(x, y, _)| (x, y)).unwrap_or_else(|| panic!("no tick {wanted}"))
}

/// Every number in an attribute that holds places.
fn places(svg: &str) -> Vec<(char, f64)> {
    let document = Document::parse(svg).unwrap();
    let mut found = Vec::new();
    for node in document.descendants().filter(|node| node.is_element() && !node.has_tag_name("svg")) {
        for attribute in node.attributes() {
            let axis = match attribute.name() {
                "x" | "x1" | "x2" | "cx" => 'x',
                "y" | "y1" | "y2" | "cy" => 'y',
                "points" => {
                    for pair in attribute.value().split_whitespace() {
                        let (x, y) = pair.split_once(',').unwrap();
                        found.extend([('x', x.parse().unwrap()), ('y', y.parse().unwrap())]);
                    }
                    continue;
                }
                _ => continue,
            };
            found.push((axis, attribute.value().parse().unwrap()));
        }
    }
    found
}

/// Well formed, every place within the picture, nothing that runs or is loaded.
fn sound(chart: &Chart) {
    let document = Document::parse(&chart.svg).unwrap();
    let root = document.root_element();
    assert_eq!(root.attribute("role"), Some("img"));
    let ids: Vec<&str> = root.attribute("aria-labelledby").unwrap().split(' ').collect();
    let said = |id: &str| document.descendants().find(|node| node.attribute("id") == Some(id)).unwrap().text().unwrap();
    assert_eq!(said(ids[0]), chart.title);
    assert_eq!(said(ids[1]), chart.description);
    for (axis, at) in places(&chart.svg) {
        let end = FINE * if axis == 'x' { WIDTH } else { HEIGHT };
        assert!((0.0..=end).contains(&at), "{axis} {at}");
    }
    for absent in ["NaN", "inf\"", "<script", "href"] {
        assert!(!chart.svg.contains(absent), "{absent}");
    }
}

#[test]
fn drawn_counts_are_those_of_the_answer() {
    let chart = forecast_chart(&story(), ForecastChart::Growth, None, Theme::Light).unwrap();
    sound(&chart);
    // The scale, read off two ticks each way.
    let ((_, y0), (_, y20)) = (tick(&chart.svg, "0"), tick(&chart.svg, "20"));
    let nodes = |y: f64| 20.0 * (y - y0) / (y20 - y0);
    let ((jan, _), (jul, _)) = (tick(&chart.svg, "Jan 2026"), tick(&chart.svg, "Jan 2027"));
    let (from, to) = (days("2026-01-01").unwrap(), days("2027-01-01").unwrap());
    let day = |x: f64| from + (to - from) * (x - jan) / (jul - jan);
    let document = Document::parse(&chart.svg).unwrap();
    let circles = document.descendants().filter(|node| node.has_tag_name("circle"));
    let drawn: Vec<(f64, f64)> = circles.map(|node| (day(number(node, "cx")), nodes(number(node, "cy")))).collect();
    let wanted = [("2026-01-01", 9.0), ("2026-06-01", 13.0), ("2026-12-01", 15.0), ("2027-08-01", 16.0)];
    for (date, count) in wanted {
        let near = |(at, nodes): &(f64, f64)| (at - days(date).unwrap()).abs() < 1.0 && (nodes - count).abs() < 0.05;
        assert!(drawn.iter().any(near), "{date} {count} is not among {drawn:?}");
    }
    let band = document.descendants().find(|node| node.has_tag_name("polygon")).unwrap().attribute("points").unwrap();
    let ends: Vec<f64> =
        band.split_whitespace().map(|pair| nodes(pair.split_once(',').unwrap().1.parse().unwrap())).collect();
    let wanted = [13.0, 12.0, 12.0, 21.0, 18.0, 13.0];
    assert!(ends.len() == 6 && ends.iter().zip(wanted).all(|(drawn, end)| (drawn - end).abs() < 0.05), "{ends:?}");
}

#[test]
fn the_finding_and_the_axes_are_in_words() {
    let chart = forecast_chart(&story(), ForecastChart::Growth, None, Theme::Auto).unwrap();
    assert_eq!(chart.title, "Hubs with 1,000 links or more: 13 now, 16 by August 2027, 90 % interval 12 to 21");
    let words: Vec<String> = texts(&chart.svg).into_iter().map(|(_, _, text)| text).collect();
    for wanted in ["Date (UTC)", "Hubs with 1,000 links or more (nodes)", "newest snapshot"] {
        assert!(words.iter().any(|text| text == wanted), "{wanted} is not in {words:?}");
    }
    let tail = forecast_chart(&story(), ForecastChart::Tail, None, Theme::Auto).unwrap();
    sound(&tail);
    assert!(
        tail.title.starts_with("Hubs with 1,000 links or more on 1 August 2027: 16 (90 % interval 12 to 21), 13 now")
    );
}

#[test]
fn themes_differ_in_colours_alone() {
    let svg = |theme| forecast_chart(&story(), ForecastChart::Growth, None, theme).unwrap().svg;
    let (auto, light, dark) = (svg(Theme::Auto), svg(Theme::Light), svg(Theme::Dark));
    assert!(auto.contains("@media screen and (prefers-color-scheme:dark)") && dark.contains("@media print"));
    assert!(!light.contains("<style>"));
    assert_eq!(places(&light), places(&dark));
    assert!(light.contains("#0072B2") && dark.contains("#56B4E9"));
}

#[test]
fn hostile_names_are_only_text() {
    let limit = json!({ "name": "<script>&\"\u{1}'".to_owned() + &"x".repeat(200), "threshold": 1000, "max_nodes": 18,
        "by": "2027-08-01", "risk": 0.05, "now": 13, "headroom": 5, "monotone": true, "dates": [],
        "at_by": { "date": "2027-08-01", "exceeding": 0.2, "crossed": 0.2 },
        "crossing": [{ "probability": 0.05, "date": "2027-03-01" }, { "probability": 0.5, "date": null }],
        "risk_reached": { "probability": 0.05, "date": "2027-03-01" },
        "arrivals": { "detail": "" }, "links_per_arrival": { "detail": "" }, "verdict": "" });
    let mut answer = story();
    answer.limits = vec![serde_json::from_value(limit).unwrap()];
    answer.label = Some("</svg><script>alert(1)</script>\u{0}".to_owned());
    let chart = forecast_chart(&answer, ForecastChart::Growth, Some(1000), Theme::Auto).unwrap();
    sound(&chart);
    assert!(chart.title.starts_with("Limit of 18 hubs with 1,000 links or more") && chart.title.chars().count() < 200);
    assert!(chart.title.ends_with("passed by 1 August 2027 with probability 20 %"));
    let document = Document::parse(&chart.svg).unwrap();
    assert!(document.descendants().all(|node| !node.has_tag_name("script")));
    assert!(texts(&chart.svg).iter().any(|(_, _, text)| text == "crossed by 1 Mar 2027: 5 %"));
}

#[test]
fn what_is_not_there_is_said() {
    let absent = |chart| matches!(chart, Err(ChartError::Absent(_)));
    assert!(absent(forecast_chart(&story(), ForecastChart::Growth, Some(7), Theme::Auto)));
    assert!(absent(forecast_chart(&story(), ForecastChart::Scenarios, None, Theme::Auto)));
    let empty = forecast("", &[], &[], &Value::Null);
    assert!(absent(forecast_chart(&empty, ForecastChart::Growth, None, Theme::Auto)));
    assert!(absent(forecast_chart(&empty, ForecastChart::Tail, None, Theme::Auto)));
}

proptest! {
    #![proptest_config(ProptestConfig::with_cases(64))]
    #[test]
    fn any_answer_is_drawn_within_its_picture(
        rows in prop::collection::vec((1_u64..=1_000_000_000_000_000, 0_u64..=1_000_000_000, 0.0..1e9_f64, 0.0..1e9_f64), 1..9),
        dates in prop::collection::vec(0_i64..2_900_000, 1..5),
        label in "\\PC{0,60}",
        past in any::<bool>(),
    ) {
        let dates: Vec<String> = dates.iter().map(|day| date_at(*day as f64).to_string()).collect();
        let tails: Vec<Tail> = rows.iter().map(|(k, now, a, b)| (*k, *now as f64, a.midpoint(*b), a.min(*b), a.max(*b))).collect();
        let counted: Vec<(u64, u64)> = rows.iter().map(|(k, now, ..)| (*k, *now)).collect();
        let ahead: Vec<(&str, &[Tail])> = dates.iter().map(|date| (date.as_str(), tails.as_slice())).collect();
        let history: Vec<(&str, &[(u64, u64)])> = if past { vec![("1969-01-01", counted.as_slice())] } else { Vec::new() };
        let answer = forecast(&label, &history, &ahead, &Value::Null);
        let first = rows[0].0;
        for (kind, threshold) in [(ForecastChart::Growth, None), (ForecastChart::Growth, Some(first)), (ForecastChart::Tail, None)] {
            sound(&forecast_chart(&answer, kind, threshold, Theme::Auto).unwrap());
        }
    }
}

//! Link lists: what the reader takes and refuses, and the `tally` command.

use std::collections::{BTreeMap, HashMap, HashSet};
use std::fmt::Write as _;
use std::io::{Read, Write};
use std::ops::ControlFlow;
use std::path::Path;
use std::process::{Output, Stdio};

use flate2::Compression;
use flate2::write::GzEncoder;
use serde_json::{Value, json};
use tailcast::census::Tally;
use tailcast::ingest::{
    FaultPolicy, IngestError, LinkFault, LinkListPlan, LinkReport, MAX_IDENTIFIER_BYTES, MAX_LINE_BYTES, count_links,
};
use tailcast::model::DegreeKind;

use crate::process::{command, run};

const LIST: &str = "time,source,target\n\
    2026-01-01T08:00:00Z,ana,ben\n\
    2026-01-02T09:30:00Z,cai,ben\n\
    2026-02-10T00:00:00Z,dot,ana\n\
    2026-03-05T12:00:00Z,ana,cai\n";

pub fn count(input: impl Read + Send, faults: FaultPolicy) -> Result<(Tally, LinkReport), IngestError> {
    let plan = LinkListPlan { kind: DegreeKind::Received, every: None, faults, link_events: true };
    count_links(input, &plan, &mut |_| ControlFlow::Continue(()))
}

fn accepted(text: &str) -> Tally {
    count(text.as_bytes(), FaultPolicy::Refuse).unwrap_or_else(|error| panic!("{text:?}: {error}")).0
}

fn refused(text: &[u8]) -> String {
    count(text, FaultPolicy::Refuse).expect_err("a fault").to_string()
}

fn gzip(bytes: &[u8]) -> Vec<u8> {
    let mut encoder = GzEncoder::new(Vec::new(), Compression::best());
    encoder.write_all(bytes).unwrap();
    encoder.finish().unwrap()
}

/// Hands out its bytes a few at a time.
pub struct Dribble<'b>(pub &'b [u8], pub usize);

impl Read for Dribble<'_> {
    fn read(&mut self, buffer: &mut [u8]) -> std::io::Result<usize> {
        let most = self.1.min(buffer.len());
        buffer.get_mut(..most).map_or(Ok(0), |room| self.0.read(room))
    }
}

#[test]
fn every_form_of_a_list_counts_the_same() {
    let csv = accepted(LIST);
    assert_eq!(csv.snapshots[0].counts.iter().collect::<Vec<_>>(), [(0, 1), (1, 2), (2, 1)]);
    let forms = [
        LIST.replace('\n', "\r\n"),
        LIST.trim_end().to_owned(),
        format!("\u{feff}{LIST}"),
        format!("\n\n{}\n\n", LIST.replace('\n', "\n\r\n")),
        LIST.replace("ana", "\"ana\"").replace("time", "\"time\""),
        "target,note,time,source\n\
         ben,\"a note, of \"\"two\"\"\nlines\",2026-01-01T09:00:00+01:00,ana\n\
         ben,,2026-01-02T09:30:00.000Z,cai\n\
         ana,x,2026-02-10,dot\n\
         cai,x,1772712000,ana\n"
            .to_owned(),
        "{\"time\":\"2026-01-01T08:00:00Z\",\"source\":\"ana\",\"target\":\"ben\"}\n\n\
         {\"target\":\"b\\u0065n\",\"time\":1767346200,\"source\":\"cai\",\"note\":[1,{}]}\r\n\
         {\"time\":\"2026-02-10\",\"source\":\"dot\",\"target\":\"ana\"}\n\
         {\"time\":1772712000.0,\"source\":\"ana\",\"target\":\"cai\"}"
            .to_owned(),
    ];
    for form in forms {
        assert_eq!(accepted(&form), csv, "{form}");
        assert_eq!(count(Dribble(form.as_bytes(), 3), FaultPolicy::Refuse).unwrap().0, csv, "{form}");
        assert_eq!(count(gzip(form.as_bytes()).as_slice(), FaultPolicy::Refuse).unwrap().0, csv, "{form}");
        // Members one after the other are one stream (RFC 1952, section 2.2).
        let (one, other) = form.as_bytes().split_at(form.len() / 2);
        let members = [gzip(one), gzip(other)].concat();
        assert_eq!(count(members.as_slice(), FaultPolicy::Refuse).unwrap().0, csv, "{form}");
    }
}

#[test]
fn an_identifier_is_its_text_whatever_it_looks_like() {
    let tally = accepted(
        "time,source,target\n0,\"a,\"\"b\"\"\nc\",Ünï\n1,\"a,\"\"b\"\"\nc\", x\n2,x,\"Ünï\"\n3, x,\"\"\"\"\n4,\"\"\"\",1e3\n",
    );
    // Nodes: the quoted one, Ünï, " x", "x", a double quote, 1e3.
    assert_eq!(tally.snapshots[0].counts.iter().collect::<Vec<_>>(), [(0, 2), (1, 3), (2, 1)]);
    let numbers = accepted("{\"time\":0,\"source\":7,\"target\":\"8\"}\n{\"time\":1,\"source\":\"9\",\"target\":8}\n");
    assert_eq!(numbers.snapshots[0].counts.iter().collect::<Vec<_>>(), [(0, 2), (2, 1)], "8 and \"8\" are one node");
}

#[test]
fn times_are_read_in_every_form_and_kept_apart_to_the_nanosecond() {
    let as_of = |time: &str| accepted(&format!("time,source,target\n{time},a,b\n")).snapshots[0].as_of.to_string();
    for (time, says) in [
        ("2026-12-01", "2026-12-01T00:00:00Z"),
        ("2026-12-01T08:30:00Z", "2026-12-01T08:30:00Z"),
        ("2026-12-01t08:30:00z", "2026-12-01T08:30:00Z"),
        ("2026-12-01T08:30:00.123456789Z", "2026-12-01T08:30:00.123456789Z"),
        ("2026-12-01T08:30:00-05:30", "2026-12-01T14:00:00Z"),
        ("0", "1970-01-01T00:00:00Z"),
        ("1796113800.5", "2026-12-01T08:30:00.5Z"),
        ("-0.000000001", "1969-12-31T23:59:59.999999999Z"),
        ("2026", "1970-01-01T00:33:46Z"),
        ("0000-01-01", "0000-01-01T00:00:00Z"),
        ("9999-12-29T23:59:59Z", "9999-12-29T23:59:59Z"),
    ] {
        assert_eq!(as_of(time), says, "{time}");
    }
    for (time, words) in [
        ("", "write it as"),
        ("soon", "write it as"),
        ("\0\0\0\0\0\0\0\0\0\0T00:00:00Z", "write it as"),
        ("2026-02-30", "write it as"),
        ("2026-12-01T25:00:00Z", "write it as"),
        ("2026-12-01T08:30:00Z[UTC]", "write it as"),
        ("+02026-12-01T08:30:00Z", "write it as"),
        ("1.7e9", "write it as"),
        ("1.1234567891", "nine decimals"),
        ("2026-12-01T08:30:00", "offset from UTC"),
        ("1796113800000", "divide milliseconds by 1000"),
        ("99999999999999999999", "seconds, so divide"),
        ("9999-12-31", "out of range"),
        ("9999-12-30T00:00:00Z", "out of range"),
    ] {
        let message = refused(format!("time,source,target\n{time},a,b\n").as_bytes());
        assert!(message.starts_with("line 2: the time ") && message.contains(words), "{time}: {message}");
    }
}

#[test]
fn a_day_read_before_does_not_leak_into_other_times() {
    // The second is of the same day as the first in its own offset only; the fourth has the day of the third.
    let times = ["2026-01-01T23:30:00-01:00", "2026-01-02T00:30:00Z", "2026-01-03", "2026-01-03T00:00:01Z"];
    let list: String = times.iter().enumerate().fold("time,source,target\n".into(), |mut list, (i, time)| {
        writeln!(list, "{time},a{i},b").unwrap();
        list
    });
    assert_eq!(accepted(&list).snapshots[0].as_of.to_string(), "2026-01-03T00:00:01Z");
    let message = refused(list.replace("2026-01-02T00:30:00Z", "2026-01-02T00:29:59Z").as_bytes());
    assert!(message.contains("line 3") && message.contains("2026-01-02T00:30:00Z"), "{message}");
}

/// A list with a fault of every kind, and the line it stands in.
fn faulty() -> (String, [(u64, LinkFault, &'static str); 8]) {
    let list = "time,source,target\n\
        5,a,b\n\
        5,a,b\n\
        6,c,c\n\
        4,a,c\n\
        6,c\n\
        soon,c,b\n\
        6,,b\n\
        7,c,b\n\
        7,\"c,b\n\
        8,d,b\n\
        8,d,b,e\n\
        8,a,d\n";
    let faults = [
        (3, LinkFault::Repeated, "from \"a\" to \"b\""),
        (4, LinkFault::SelfLink, "\"c\" to itself"),
        (5, LinkFault::OutOfOrder, "before that of an earlier line"),
        (6, LinkFault::Malformed, "2 fields where the header has 3"),
        (7, LinkFault::Malformed, "\"soon\""),
        (8, LinkFault::Malformed, "source is empty"),
        (10, LinkFault::Malformed, "double quote"),
        (12, LinkFault::Malformed, "4 fields"),
    ];
    (list.to_owned(), faults)
}

#[test]
fn faults_are_told_with_their_lines_and_skipped_when_asked() {
    let (list, faults) = faulty();
    let (tally, report) = count(list.as_bytes(), FaultPolicy::Skip).unwrap();
    assert_eq!((report.lines, report.links, report.faults()), (12, 4, 8));
    for (line, fault, words) in faults {
        let of_kind = match fault {
            LinkFault::OutOfOrder => &report.out_of_order,
            LinkFault::Repeated => &report.repeated,
            LinkFault::SelfLink => &report.self_links,
            LinkFault::Malformed => &report.malformed,
        };
        let (_, reason) = of_kind.first.iter().find(|(found, _)| *found == line).expect("the line is listed");
        assert!(reason.contains(words), "{line}: {reason}");
    }
    let clean = "time,source,target\n5,a,b\n7,c,b\n8,d,b\n8,a,d\n";
    assert_eq!(tally, accepted(clean), "faulty lines leave no trace");
    // Each by itself stops the counting, and is told by the line it stands in.
    let lines: Vec<&str> = list.lines().collect();
    for (line, fault, words) in faults {
        let sound = |number: u64| number <= 2 || number == line || (number < line && number == 9);
        let alone: Vec<&str> = (1..=lines.len() as u64).filter(|&n| sound(n)).map(|n| lines[n as usize - 1]).collect();
        let error = count(alone.join("\n").as_bytes(), FaultPolicy::Refuse).expect_err("a fault");
        let IngestError::Faulty { line: at, fault: found, reason } = error else { panic!("{error}") };
        assert_eq!((at, found), (alone.len() as u64, fault), "{reason}");
        assert!(reason.contains(words), "{reason}");
    }
}

#[test]
fn only_the_first_faults_of_a_kind_are_listed() {
    let list = format!("time,source,target\n1,a,b\n{}", "x,a,b\n".repeat(1_000));
    let (_, report) = count(list.as_bytes(), FaultPolicy::Skip).unwrap();
    assert_eq!(report.malformed.count, 1_000);
    assert_eq!(report.malformed.first.iter().map(|(line, _)| *line).collect::<Vec<_>>(), [3, 4, 5, 6, 7]);
}

#[test]
fn the_first_fault_stops_the_counting_even_among_many() {
    // The repeat stands in the same batch as the line that cannot be read, and before it.
    let message = refused(b"time,source,target\n1,a,b\n1,a,b\nsoon,a,b\n");
    assert!(message.starts_with("line 3: it repeats"), "{message}");
}

#[test]
fn headers_are_checked() {
    for (list, words) in [
        ("", "no link was counted"),
        ("\n\n", "no link was counted"),
        ("time,source,target\n", "no link was counted"),
        ("when,source,target\n1,a,b\n", "no column time, but \"when\", \"source\", \"target\""),
        ("\n1,a,b\n", "line 2: the header has no column time"),
        ("time,source,target,source\n", "the column source twice"),
        ("Time,Source,Target\n", "no column time"),
        ("time;source;target\n", "no column time"),
    ] {
        let message = refused(list.as_bytes());
        assert!(message.contains(words), "{list:?}: {message}");
    }
}

#[test]
fn json_lines_are_checked() {
    for (line, words) in [
        ("{\"time\":1,\"source\":1}", "missing field `target`"),
        ("{\"time\":1,\"time\":1,\"source\":1,\"target\":2}", "duplicate field `time`"),
        ("{\"time\":1,\"source\":1.5,\"target\":2}", "a string or an integer"),
        ("{\"time\":1,\"source\":1,\"target\":18446744073709551616}", "a string or an integer"),
        ("{\"time\":null,\"source\":1,\"target\":2}", "a string or a number"),
        ("{\"time\":1e300,\"source\":1,\"target\":2}", "out of range"),
        ("{\"time\":1,\"source\":1,\"target\":2} x", "trailing characters"),
        ("{\"time\":1,\"source\":1,", "EOF"),
        ("[1,2,3]", "no JSON object"),
        ("1,a,b", "no JSON object"),
    ] {
        let list = format!("{{\"time\":0,\"source\":1,\"target\":2}}\n{line}\n");
        let message = refused(list.as_bytes());
        assert!(message.starts_with("line 2: ") && message.contains(words), "{line}: {message}");
        assert_eq!(message.matches("line ").count(), 1 + message.matches("a line is").count(), "{message}");
    }
}

#[test]
fn lines_and_identifiers_have_a_longest() {
    let name = "n".repeat(MAX_IDENTIFIER_BYTES);
    accepted(&format!("time,source,target\n1,{name},b\n"));
    let message = refused(format!("time,source,target\n1,{name}n,b\n").as_bytes());
    assert!(
        message.contains("line 2: its source") && message.contains("1025 bytes") && message.len() < 300,
        "{message}"
    );
    let note = |bytes: usize| "x".repeat(bytes - "1,a,b,\n".len());
    accepted(&format!("time,source,target,note\n1,a,b,{}\n", note(MAX_LINE_BYTES)));
    for (open, rest) in [("", ""), ("\"", "2,a,b,\n")] {
        // Whether plain or in a quote that never closes, too long a line is passed over and the next one counted.
        let list = format!("time,source,target,note\n1,c,b,{open}{}\n{rest}3,d,b,\n", note(2 * MAX_LINE_BYTES));
        let (tally, report) = count(list.as_bytes(), FaultPolicy::Skip).unwrap();
        assert_eq!(report.malformed.first[0].0, 2);
        assert!(report.malformed.first[0].1.contains("longer than 1048576 bytes"), "{:?}", report.malformed);
        assert_eq!(tally.snapshots[0].as_of.as_second(), 3, "{:?}", report.lines);
    }
}

#[test]
fn a_quote_that_never_closes_costs_its_own_line_alone() {
    let mut list = "time,source,target\n0,a,b\n1,\"c,b\n".to_owned();
    (2..200_000).for_each(|i| writeln!(list, "{i},c{i},b").unwrap());
    let (_, report) = count(list.as_bytes(), FaultPolicy::Skip).unwrap();
    assert_eq!((report.links, report.faults(), report.malformed.first[0].0), (199_999, 1, 3));
}

#[test]
fn broken_compression_is_said() {
    let mut bytes = gzip(LIST.as_bytes());
    bytes.truncate(bytes.len() - 5);
    assert!(refused(&bytes).contains("compress the list anew"));
    let mut bytes = gzip(LIST.repeat(100).as_bytes());
    let middle = bytes.len() / 2;
    bytes[middle] ^= 0x55;
    assert!(refused(&bytes).contains("gzip") || refused(&bytes).contains("line"));
}

/// 96 MiB out of about 100 kB: one endless line, a line over and over, and empty lines.
#[test]
fn a_bomb_is_refused_long_before_it_has_gone_off() {
    let most = 80 << 20;
    let header = "time,source,target\n";
    for piece in ["x", "2026-01-01,ana,ben\n", "\n"] {
        let list = gzip(format!("{header}{}", piece.repeat((96 << 20) / piece.len())).as_bytes());
        assert!(list.len() < most / 200, "{}", list.len());
        let error = count(list.as_slice(), FaultPolicy::Skip).unwrap_err().to_string();
        assert!(error.contains("more than 200 times") && error.contains("send the list as it is"), "{error}");
    }
    // What is merely regular, and short, is counted.
    let list = gzip(format!("{header}{}", "2026-01-01,ana,ben\n".repeat(1_000_000)).as_bytes());
    assert_eq!(count(list.as_slice(), FaultPolicy::Skip).unwrap().1.links, 1);
}

/// Many blocks, read by several threads at once, against one loop over the lines.
#[test]
fn a_list_of_many_blocks_is_counted_line_by_line() {
    let mut state = 1u64;
    let mut draw = |below: u64| {
        state = state.wrapping_mul(6_364_136_223_846_793_005).wrapping_add(1_442_695_040_888_963_407);
        (state >> 33) % below
    };
    let mut list = String::from("time,source,target\n");
    let (mut degrees, mut pairs) = (HashMap::new(), HashSet::new());
    let (mut now, mut clock, mut links) = (0, 0, 0);
    let mut faults: [(u64, Option<u64>); 4] = Default::default();
    let mut line = 1;
    while list.len() < 5 << 20 {
        clock += draw(3) / 2;
        let time = if draw(500) == 0 { clock / 2 } else { clock };
        let (source, target) = (draw(3 + line / 20), draw(1 + line / 40));
        line += 1;
        let fault = if draw(400) == 0 {
            writeln!(list, "{time},n{source}").unwrap();
            Some(3)
        } else {
            // A quote now and then: such blocks are cut where they are read.
            let quote = if line / 20_000 % 3 == 1 && draw(1_000) == 0 { "\"" } else { "" };
            writeln!(list, "{time},{quote}n{source}{quote},n{target}").unwrap();
            if links > 0 && time < now {
                Some(0)
            } else if source == target {
                Some(2)
            } else {
                if time != now {
                    pairs.clear();
                }
                now = time;
                (!pairs.insert((source, target))).then_some(1)
            }
        };
        match fault {
            Some(kind) => {
                faults[kind].0 += 1;
                faults[kind].1.get_or_insert(line);
            }
            None => {
                degrees.entry(source).or_insert(0u64);
                *degrees.entry(target).or_insert(0) += 1;
                links += 1;
            }
        }
    }
    let mut counts = BTreeMap::new();
    for degree in degrees.into_values() {
        *counts.entry(degree).or_insert(0u64) += 1;
    }
    for link_events in [true, false] {
        let plan = LinkListPlan { kind: DegreeKind::Received, every: None, faults: FaultPolicy::Skip, link_events };
        let (tally, report) = count_links(list.as_bytes(), &plan, &mut |_| ControlFlow::Continue(())).unwrap();
        assert_eq!(report.links, links);
        let found = [&report.out_of_order, &report.repeated, &report.self_links, &report.malformed];
        assert_eq!(found.map(|lines| (lines.count, lines.first.first().map(|(line, _)| *line))), faults);
        assert_eq!(
            tally.snapshots[0].counts.iter().collect::<Vec<_>>(),
            counts.clone().into_iter().collect::<Vec<_>>()
        );
        assert_eq!(tally.link_events.is_some(), link_events);
    }
    let first = faults.iter().filter_map(|&(_, line)| line).min().unwrap();
    assert!(refused(list.as_bytes()).starts_with(&format!("line {first}: ")));
}

#[test]
fn the_watcher_sees_every_byte_and_can_stop() {
    let list = format!("{LIST}{}", "\n".repeat(1 << 20));
    let plan = LinkListPlan { kind: DegreeKind::Received, every: None, faults: FaultPolicy::Refuse, link_events: true };
    let mut seen = Vec::new();
    count_links(list.as_bytes(), &plan, &mut |progress| {
        seen.push(progress.bytes);
        ControlFlow::Continue(())
    })
    .unwrap();
    assert_eq!(seen.last(), Some(&(list.len() as u64)));
    assert!(seen.len() > 3 && seen.is_sorted(), "{seen:?}");
    let mut calls = 0;
    let stopped = count_links(list.as_bytes(), &plan, &mut |_| {
        calls += 1;
        if calls == 2 { ControlFlow::Break(()) } else { ControlFlow::Continue(()) }
    });
    assert!(matches!(stopped, Err(IngestError::Cancelled)));
    assert_eq!(calls, 2);
}

fn tally(folder: &Path, arguments: &[&str], input: &str) -> Output {
    let mut command = command(folder);
    command.arg("tally").args(arguments);
    run(command, input)
}

fn printed(output: &Output) -> String {
    assert!(output.status.success(), "{}", String::from_utf8_lossy(&output.stderr));
    String::from_utf8(output.stdout.clone()).unwrap()
}

#[test]
fn tally_prints_degree_counts_of_a_file_and_of_the_standard_input() {
    let folder = tempfile::tempdir().unwrap();
    std::fs::write(folder.path().join("links.csv"), LIST).unwrap();
    std::fs::write(folder.path().join("links.csv.gz"), gzip(LIST.as_bytes())).unwrap();
    let expected = "degree,nodes\r\n0,1\r\n1,2\r\n2,1\r\n";
    for (arguments, input) in [(&["links.csv"], ""), (&["links.csv.gz"], ""), (&["-"], LIST)] {
        let output = tally(folder.path(), arguments, input);
        assert_eq!(printed(&output), expected);
        assert!(output.stderr.is_empty());
    }
    let total = tally(folder.path(), &["links.csv", "--kind", "total"], "");
    assert_eq!(printed(&total), "degree,nodes\r\n1,1\r\n2,2\r\n3,1\r\n");
}

#[test]
fn tally_prints_the_evidence_as_json() {
    let folder = tempfile::tempdir().unwrap();
    let output = tally(folder.path(), &["-", "--format", "json", "--every", "P1M"], LIST);
    let body: Value = serde_json::from_str(&printed(&output)).unwrap();
    assert_eq!(body["degree_kind"], "received");
    // The last period, of five days, is one with the month before.
    assert_eq!(
        body["snapshots"],
        json!([
            {"as_of": "2026-02-01T00:00:00Z", "degree_counts": [[0, 2], [2, 1]]},
            {"as_of": "2026-03-05T12:00:00Z", "degree_counts": [[0, 1], [1, 2], [2, 1]]},
        ])
    );
    assert_eq!(
        body["transitions"],
        json!([{"from": "2026-02-01T00:00:00Z", "to": "2026-03-05T12:00:00Z",
                "counts": [[null, 0, 1], [0, 1, 2], [2, 2, 1]]}])
    );
    // Landings: on ben (1 of 1 end, 2 nodes: r = 2), on ana and on cai (none: r = 0).
    assert_eq!(body["link_events"]["ratios"], json!([[0.0, 0.0, 2], [2.0, 0.0, 1]]));
    assert_eq!(body["link_events"]["windows"][0]["cells"], json!([[0, 0, 0, 1.0, 0.0], [1, 1, 1, 1.0, 1.0]]));
    let whole = tally(folder.path(), &["-", "--format", "json"], LIST);
    let whole: Value = serde_json::from_str(&printed(&whole)).unwrap();
    assert_eq!(whole["snapshots"].as_array().unwrap().len(), 1);
    assert!(whole.get("transitions").is_none());
}

#[test]
fn tally_tells_faults_with_exit_code_2_or_skips_them() {
    let folder = tempfile::tempdir().unwrap();
    let (list, _) = faulty();
    std::fs::write(folder.path().join("links.csv"), &list).unwrap();
    let output = tally(folder.path(), &["links.csv"], "");
    let message = String::from_utf8_lossy(&output.stderr).into_owned();
    assert_eq!(output.status.code(), Some(2));
    assert!(output.stdout.is_empty());
    assert!(message.contains("links.csv: line 3: ") && message.contains("--faults skip"), "{message}");
    let output = tally(folder.path(), &["links.csv", "--faults", "skip"], "");
    assert_eq!(printed(&output), "degree,nodes\r\n0,2\r\n1,1\r\n3,1\r\n");
    let report = String::from_utf8_lossy(&output.stderr).into_owned();
    for words in
        ["12 lines, 4 links counted", "5 malformed", "line 7: the time \"soon\"", "1 out of order", "1 repeated"]
    {
        assert!(report.contains(words), "{words}: {report}");
    }
    let quiet = tally(folder.path(), &["links.csv", "--faults", "skip", "--quiet"], "");
    assert!(quiet.status.success() && quiet.stderr.is_empty());
    let nothing = tally(folder.path(), &["-", "--faults", "skip"], "time,source,target\nx,a,b\n");
    let message = String::from_utf8_lossy(&nothing.stderr).into_owned();
    assert_eq!(nothing.status.code(), Some(2));
    assert!(
        message.contains("no link was counted: of 1 lines, 1 are faulty") && message.contains("\"x\""),
        "{message}"
    );
}

#[test]
fn tally_refuses_options_that_do_not_go_together_and_missing_files() {
    let folder = tempfile::tempdir().unwrap();
    for (arguments, code, words) in [
        (&["-", "--every", "P1M"][..], 2, "--format json"),
        (&["-", "--every", "1 month", "--format", "json"], 2, "ISO 8601"),
        (&["-", "--every", "P0D", "--format", "json"], 2, "ISO 8601"),
        (&["-", "--every", "PT1H", "--format", "json"], 2, "more than 1000 snapshots"),
        (&["nowhere.csv"], 1, "nowhere.csv"),
        (&["-", "--kind", "sent"], 2, "received"),
    ] {
        let output = tally(folder.path(), arguments, LIST);
        let message = String::from_utf8_lossy(&output.stderr).into_owned();
        assert_eq!(output.status.code(), Some(code), "{message}");
        assert!(message.contains(words), "{arguments:?}: {message}");
    }
}

/// A network that grows, as Heronsgate's accounts gain followers: newcomers follow, and the followed are followed more.
fn growing(links: u64) -> String {
    let mut list = "time,source,target\n".to_owned();
    let (mut state, mut nodes, mut targets) = (7u64, 2u64, vec![0u64, 1]);
    for i in 0..links {
        let mut random = |below: u64| {
            state = state.wrapping_mul(6_364_136_223_846_793_005).wrapping_add(1_442_695_040_888_963_407);
            (state >> 33) % below
        };
        let source = if random(3) == 0 { nodes } else { random(nodes) };
        let target = if random(10) < 7 { targets[random(targets.len() as u64) as usize] } else { random(nodes) };
        if source == target {
            continue;
        }
        nodes = nodes.max(source + 1);
        targets.push(target);
        writeln!(list, "{},account-{source},account-{target}", 1_767_225_600 + i * 900).unwrap();
    }
    list
}

#[test]
fn from_a_link_list_to_a_forecast_in_two_commands() {
    let folder = tempfile::tempdir().unwrap();
    let list = growing(20_000);
    let forecast = |evidence: &str, arguments: &[&str]| {
        let mut forecast = command(folder.path());
        forecast.args(["forecast", "-", "--format", "json"]).args(arguments);
        run(forecast, evidence)
    };
    for (kind, every) in [("received", Some("P1M")), ("total", Some("P1M")), ("received", None)] {
        let mut arguments = vec!["-", "--format", "json", "--kind", kind];
        arguments.extend(every.into_iter().flat_map(|every| ["--every", every]));
        let evidence = printed(&tally(folder.path(), &arguments, &list));
        let mut asked = vec!["--thresholds", "10,50", "--until", "2027-01-01", "--every", "P1M", "--levels", "0.8"];
        // One snapshot tells nothing of how many arrive.
        asked.extend(every.is_none().then_some(["--arrivals", "32"]).into_iter().flatten());
        let answer: Value = serde_json::from_str(&printed(&forecast(&evidence, &asked))).unwrap();
        let dates = answer["forecast"].as_array().unwrap();
        assert!((4..=6).contains(&dates.len()), "{dates:?}");
        assert_eq!(dates[0]["tail"][1]["threshold"], 50);
        assert_eq!(dates[0]["tail"][1]["intervals"][0]["level"], 0.8);
        let expected = |at: usize| dates[at]["tail"][0]["expected"].as_f64().unwrap();
        assert!(expected(0) < expected(dates.len() - 1), "hubs become more");
    }
}

#[test]
fn options_of_forecast_take_the_place_of_the_bodys_fields() {
    let folder = tempfile::tempdir().unwrap();
    let body = crate::harness::forecast_body();
    let forecast = |body: &str, arguments: &[&str]| {
        let mut forecast = command(folder.path());
        forecast.args(["forecast", "-", "--format", "json"]).args(arguments);
        run(forecast, body)
    };
    let answer = |body: &str, arguments: &[&str]| -> Value {
        serde_json::from_str(&printed(&forecast(body, arguments))).unwrap()
    };
    let with_mark = format!("\u{feff}{body}");
    let asked =
        answer(&with_mark, &["--thresholds", "3,7", "--until", "2026-12-24", "--levels", "0.6", "--arrivals", "9"]);
    let at = &asked["forecast"][0];
    assert_eq!(asked["forecast"].as_array().unwrap().len(), 1);
    assert_eq!(at["date"], "2026-12-24");
    assert_eq!((&at["tail"][0]["threshold"], &at["tail"][1]["threshold"]), (&json!(3), &json!(7)));
    assert_eq!(at["nodes"]["intervals"][0]["level"], 0.6);
    let mut changed = body.clone();
    changed["thresholds"] = json!([3, 7]);
    changed["dates"] = json!(["2026-12-24"]);
    changed["levels"] = json!([0.6]);
    changed["arrivals"] = json!({"per_day": 9});
    assert_eq!(answer(&changed.to_string(), &[]), asked, "as if the body said so");
    let untouched = body.to_string();
    for (arguments, words) in [
        (&["--every", "P1M"][..], "--until"),
        (&["--thresholds", "ten"], "--thresholds: write numbers like 10,100,1000"),
        (&["--thresholds", "1],\"seed\":[1"], "--thresholds: write numbers"),
        (&["--thresholds", "0"], "/thresholds/0"),
        (&["--levels", "90"], "/levels/0"),
        (&["--until", "soon"], "/dates/0"),
        (&["--until", "2020-01-01"], "/dates/0"),
        (&["--until", "2027-01-01", "--every", "monthly"], "/horizon/every"),
        (&["--arrivals=-1"], "/arrivals/per_day"),
        (&["--arrivals", "many"], "--arrivals: write numbers"),
    ] {
        let output = forecast(&untouched, arguments);
        let message = String::from_utf8_lossy(&output.stderr).into_owned();
        assert_eq!(output.status.code(), Some(2), "{arguments:?}: {message}");
        assert!(message.contains(words), "{arguments:?}: {message}");
    }
    let twice = untouched.replacen('{', "{\"model\":\"mix\",\"model\":\"mix\",", 1);
    let output = forecast(&twice, &["--levels", "0.5"]);
    assert!(String::from_utf8_lossy(&output.stderr).contains("given twice"));
    assert!(!forecast("[1]", &["--levels", "0.5"]).status.success());
}

/// Bytes of the largest memory a process had.
#[cfg(target_os = "linux")]
fn peak_bytes(process: u32) -> u64 {
    let status = std::fs::read_to_string(format!("/proc/{process}/status")).unwrap();
    let line = status.lines().find_map(|line| line.strip_prefix("VmHWM:")).expect("a peak");
    line.trim().trim_end_matches(" kB").parse::<u64>().unwrap() * 1_024
}

/// A line without an end, lines that are all faulty, and many links among few nodes: none of them takes memory.
#[cfg(target_os = "linux")]
#[test]
fn memory_follows_nodes_not_bytes_or_links() {
    const ROUNDS: usize = 2_000;
    let folder = tempfile::tempdir().unwrap();
    let links: String = (0..1_000).fold(String::new(), |mut text, i| {
        writeln!(text, "0,{},{}", i % 40, 40 + i / 40).unwrap();
        text
    });
    let faulty = "x,\"y\n,\n".repeat(4_000);
    for repeated in ["an endless line ".repeat(2_000), faulty, links, "\"".repeat(30_000)] {
        let mut command = command(folder.path());
        command.args(["tally", "-", "--faults", "skip"]);
        let mut child = command.stdin(Stdio::piped()).stdout(Stdio::piped()).stderr(Stdio::piped()).spawn().unwrap();
        let mut input = child.stdin.take().unwrap();
        input.write_all(b"time,source,target\n0,a,b\n").unwrap();
        for _ in 0..ROUNDS {
            input.write_all(repeated.as_bytes()).unwrap();
        }
        let peak = peak_bytes(child.id());
        drop(input);
        assert!(child.wait_with_output().unwrap().status.success());
        assert!(repeated.len() * ROUNDS > 15_000_000);
        assert!(peak < 48 << 20, "{peak} bytes at {:.20}", repeated);
    }
}

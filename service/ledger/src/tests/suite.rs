//! Records, outcomes, windows: what every store does.

use std::ops::ControlFlow;

use super::parcels::{
    CATEGORIES, DAY, HOUR, MODEL, START, keep, observe, outcome, record, records, verified, version,
    with_live,
};
use super::places::Place;
use crate::{
    FileEntry, FileStart, Job, Ledger, LedgerError, MOST_SEGMENT_VALUES, NewOutcome, NewRecord,
    OTHER_SEGMENTS, OutcomeState, RawOutcome, RawRecord, Reply, Stream, VersionRow, day_of,
};

const ALWAYS: [i64; 2] = [i64::MIN, i64::MAX];

fn all_records(ledger: &Ledger, version: &VersionRow, period: [i64; 2]) -> Vec<RawRecord> {
    let mut found = Vec::new();
    ledger
        .records(MODEL, &version.fingerprint, period, |record| {
            found.push(record);
            ControlFlow::Continue(())
        })
        .unwrap();
    found
}

fn scored(ledger: &Ledger, version: &VersionRow, stream: &Stream) -> f64 {
    let merged = ledger.merged(MODEL, &version.fingerprint, stream, ALWAYS).unwrap();
    merged.map_or(0.0, |summary| summary.scored())
}

fn observed(ledger: &Ledger, version: &VersionRow) -> Vec<f64> {
    let merged = ledger.merged(MODEL, &version.fingerprint, &Stream::All, ALWAYS).unwrap();
    merged.map_or_else(Vec::new, |summary| summary.observed().to_vec())
}

fn depot(value: &str) -> Stream {
    Stream::Segment { field: "depot".into(), value: value.into() }
}

pub(super) fn a_record_is_kept_as_it_came(place: &dyn Place) {
    let ledger = place.open();
    let live = with_live(&ledger);
    let mut odd = record("Zürich 7/\u{1F4E6}", START + HOUR, 4);
    odd.log_odds = vec![0.1 + 0.2, -0.0, 700.0];
    odd.inputs = vec![f64::NAN, -1.0, 1.0];
    assert_eq!(keep(&ledger, &live, vec![odd.clone()]), [false]);
    let found = ledger.record(MODEL, &odd.id).unwrap().unwrap();
    assert_eq!((found.time, found.received), (odd.time, START + 400 * DAY));
    let bits = |values: &[f64]| values.iter().map(|value| value.to_bits()).collect::<Vec<_>>();
    assert_eq!(bits(&found.log_odds), bits(&odd.log_odds));
    assert_eq!(bits(&found.inputs), bits(&odd.inputs));
    assert_eq!((found.segments, found.outcome), (odd.segments, None));
    assert_eq!(ledger.record(MODEL, "Zürich 7").unwrap(), None);
    assert_eq!(ledger.record("another", "Zürich 7/\u{1F4E6}").unwrap(), None);
    verified(&ledger);
}

pub(super) fn the_same_id_again_changes_nothing(place: &dyn Place) {
    let ledger = place.open();
    let live = with_live(&ledger);
    let first = record("S-1", START, 1);
    let other_numbers = record("S-1", START + DAY, 2);
    assert_eq!(keep(&ledger, &live, vec![first.clone(), other_numbers.clone()]), [false, true]);
    assert_eq!(keep(&ledger, &live, vec![other_numbers, record("S-2", START, 3)]), [true, false]);
    assert_eq!(ledger.record(MODEL, "S-1").unwrap().unwrap().log_odds, first.log_odds);
    assert_eq!(scored(&ledger, &live, &Stream::All), 2.0);
    assert_eq!(ledger.counts(MODEL).unwrap().records, 2);
    verified(&ledger);
}

pub(super) fn outcomes_may_come_first(place: &dyn Place) {
    let ledger = place.open();
    let live = with_live(&ledger);
    let early = vec![outcome("S-1", "carded", START + HOUR), outcome("S-9", "carded", START + HOUR)];
    assert_eq!(observe(&ledger, early), [OutcomeState::Waiting, OutcomeState::Waiting]);
    assert_eq!(ledger.counts(MODEL).unwrap().waiting_outcomes, 2);
    assert_eq!(keep(&ledger, &live, vec![record("S-1", START, 1), record("S-2", START, 2)]), [false, false]);
    assert_eq!(observe(&ledger, vec![outcome("S-2", "neighbour", START)]), [OutcomeState::Matched]);
    let want =
        RawOutcome { category: "carded".into(), observed_at: START + HOUR, received: START + 401 * DAY };
    assert_eq!(ledger.record(MODEL, "S-1").unwrap().unwrap().outcome, Some(want));
    assert_eq!(observed(&ledger, &live), [0.0, 0.0, 1.0, 1.0]);
    let counts = ledger.counts(MODEL).unwrap();
    assert_eq!((counts.records, counts.matched), (2, 2));
    assert_eq!((counts.waiting_records, counts.waiting_outcomes), (0, 1));
    assert_eq!(ledger.waiting_records().unwrap(), 0);
    verified(&ledger);
}

pub(super) fn the_same_outcome_again_changes_nothing(place: &dyn Place) {
    let ledger = place.open();
    let live = with_live(&ledger);
    keep(&ledger, &live, vec![record("S-1", START, 1)]);
    for id in ["S-1", "S-2"] {
        observe(&ledger, vec![outcome(id, "carded", START + HOUR)]);
        let again = vec![outcome(id, "carded", START + 2 * HOUR), outcome(id, "carded", START)];
        assert_eq!(observe(&ledger, again), [OutcomeState::Repeated, OutcomeState::Repeated], "{id}");
    }
    assert_eq!(observed(&ledger, &live), [0.0, 0.0, 0.0, 1.0]);
    assert_eq!(ledger.record(MODEL, "S-1").unwrap().unwrap().outcome.unwrap().observed_at, START + HOUR);
    assert_eq!(ledger.former_outcomes(MODEL, "S-1").unwrap(), []);
    verified(&ledger);
}

pub(super) fn corrections_replace_and_keep_history(place: &dyn Place) {
    let ledger = place.open();
    let live = with_live(&ledger);
    keep(&ledger, &live, vec![record("S-1", START, 1), record("S-2", START, 5)]);
    for (category, at, want) in [
        ("carded", 1, OutcomeState::Matched),
        ("neighbour", 2, OutcomeState::Corrected),
        ("handed-over", 3, OutcomeState::Corrected),
    ] {
        assert_eq!(observe(&ledger, vec![outcome("S-1", category, START + at * HOUR)]), [want]);
        verified(&ledger);
    }
    assert_eq!(observed(&ledger, &live), [1.0, 0.0, 0.0, 0.0]);
    let former = ledger.former_outcomes(MODEL, "S-1").unwrap();
    let former: Vec<_> = former.iter().map(|was| (was.category.as_str(), was.observed_at)).collect();
    assert_eq!(former, [("carded", START + HOUR), ("neighbour", START + 2 * HOUR)]);
    // One that waits is corrected, too.
    observe(&ledger, vec![outcome("S-3", "carded", START)]);
    assert_eq!(observe(&ledger, vec![outcome("S-3", "neighbour", START)]), [OutcomeState::Corrected]);
    keep(&ledger, &live, vec![record("S-3", START, 2)]);
    assert_eq!(observed(&ledger, &live), [1.0, 0.0, 1.0, 0.0]);
    assert_eq!(ledger.former_outcomes(MODEL, "S-3").unwrap().len(), 1);
    assert_eq!(ledger.counts(MODEL).unwrap().waiting_records, 1);
    verified(&ledger);
}

pub(super) fn bad_outcomes_are_refused_by_row(place: &dyn Place) {
    let ledger = place.open();
    let refusal = |states: &[OutcomeState]| match states {
        [OutcomeState::Refused(reason), ..] => reason.clone(),
        other => panic!("{other:?}"),
    };
    let none_live = observe(&ledger, vec![outcome("S-1", "carded", START)]);
    assert_eq!(refusal(&none_live), "no version of the model is live");
    let live = with_live(&ledger);
    keep(&ledger, &live, vec![record("S-1", START, 1)]);
    for id in ["S-1", "S-7"] {
        let states = observe(&ledger, vec![outcome(id, "lost", START), outcome(id, "carded", START)]);
        let known = CATEGORIES.join("`, `");
        assert_eq!(refusal(&states), format!("`lost` is no category of the model; it has `{known}`"));
        assert!(!matches!(states[1], OutcomeState::Refused(_)));
    }
    verified(&ledger);
}

pub(super) fn windows_are_days_of_record_time(place: &dyn Place) {
    let ledger = place.open();
    let live = with_live(&ledger);
    let times = [START, START + DAY - 1, START + DAY, -1, 0, START + 400 * DAY];
    let new = times.iter().enumerate().map(|(i, time)| record(&format!("S-{i}"), *time, i as u32)).collect();
    keep(&ledger, &live, new);
    let windows = ledger.summaries_of(MODEL, &live.fingerprint, &Stream::All, ALWAYS).unwrap();
    let found: Vec<_> = windows.iter().map(|window| (window.day, window.summary.scored())).collect();
    let first = day_of(START);
    assert_eq!(found, [(-1, 1.0), (0, 1.0), (first, 2.0), (first + 1, 1.0), (first + 400, 1.0)]);
    assert_eq!(ledger.days(MODEL, &live.fingerprint).unwrap(), Some([-1, first + 400]));
    assert_eq!(ledger.counts(MODEL).unwrap().days, Some([-1, first + 400]));
    let some = ledger.summaries(MODEL, &live.fingerprint, [first, first]).unwrap();
    assert!(some.iter().all(|window| window.day == first) && some.len() == 3);
    verified(&ledger);
}

pub(super) fn streams_add_up(place: &dyn Place) {
    let ledger = place.open();
    let live = with_live(&ledger);
    assert_eq!(ledger.streams(MODEL, &live.fingerprint).unwrap(), []);
    assert_eq!(ledger.merged(MODEL, &live.fingerprint, &Stream::All, ALWAYS).unwrap(), None);
    let new = (0..30).map(|i| record(&format!("S-{i}"), START + i64::from(i) * 3 * HOUR, i)).collect();
    keep(&ledger, &live, new);
    let streams = ledger.streams(MODEL, &live.fingerprint).unwrap();
    assert_eq!(streams, [Stream::All, depot("(none)"), depot("north"), depot("south")]);
    let by_depot: Vec<f64> = streams.iter().map(|stream| scored(&ledger, &live, stream)).collect();
    assert_eq!(by_depot, [30.0, 10.0, 10.0, 10.0]);
    let mut windows = ledger.summaries(MODEL, &live.fingerprint, ALWAYS).unwrap().into_iter();
    let mut whole = windows.next().unwrap().summary;
    for window in windows.filter(|window| window.stream == Stream::All) {
        whole.merge(&window.summary).unwrap();
    }
    assert_eq!(whole.scored(), 30.0);
    assert_eq!(ledger.merged(MODEL, &live.fingerprint, &Stream::All, ALWAYS).unwrap(), Some(whole));
}

pub(super) fn values_beyond_the_two_hundredth_share_a_stream(place: &dyn Place) {
    let ledger = place.open();
    let live = with_live(&ledger);
    let with_depot = |i: usize| NewRecord {
        segments: vec![format!("depot {i}")],
        ..record(&format!("S-{i}"), START, i as u32)
    };
    let extra = 5;
    keep(&ledger, &live, (0..MOST_SEGMENT_VALUES + extra).map(with_depot).collect());
    let streams = ledger.streams(MODEL, &live.fingerprint).unwrap();
    assert_eq!(streams.len(), 1 + MOST_SEGMENT_VALUES + 1);
    assert_eq!(scored(&ledger, &live, &depot(OTHER_SEGMENTS)), extra as f64);
    observe(&ledger, vec![outcome("S-203", "carded", START), outcome("S-3", "carded", START)]);
    verified(&ledger);
}

pub(super) fn periods_end_before_their_end(place: &dyn Place) {
    let ledger = place.open();
    let live = with_live(&ledger);
    let new = (0..10).map(|i| record(&format!("S-{i}"), START + i64::from(i) * 8 * HOUR, i)).collect();
    keep(&ledger, &live, new);
    let ids = |period| -> Vec<String> {
        all_records(&ledger, &live, period).into_iter().map(|record| record.id).collect()
    };
    assert_eq!(ids([START + 8 * HOUR, START + 32 * HOUR]), ["S-1", "S-2", "S-3"]);
    assert_eq!(ids([START, START]), [""; 0]);
    assert_eq!(ids(ALWAYS).len(), 10);
    let mut visited = 0;
    ledger
        .records(MODEL, &live.fingerprint, ALWAYS, |_| {
            visited += 1;
            if visited == 4 { ControlFlow::Break(()) } else { ControlFlow::Continue(()) }
        })
        .unwrap();
    assert_eq!(visited, 4);
    assert_eq!(all_records(&ledger, &version("never published"), ALWAYS), []);
}

pub(super) fn a_request_that_cannot_be_folded_fails_alone(place: &dyn Place) {
    let ledger = place.open();
    let live = with_live(&ledger);
    let bad = NewRecord { log_odds: vec![1.0], ..record("S-bad", START, 1) };
    let jobs = [
        records(&live, vec![record("S-1", START, 1)]),
        records(&live, vec![record("S-2", START, 2), bad]),
        records(&version("never published"), vec![record("S-3", START, 3)]),
        records(&live, vec![record("S-4", START, 4)]),
    ];
    let (answer, answers) = std::sync::mpsc::channel();
    for (position, job) in jobs.into_iter().enumerate() {
        let answer = answer.clone();
        ledger.submit(Job::Records(job), move |reply| answer.send((position, reply)).unwrap()).unwrap();
    }
    drop(answer);
    let mut answers: Vec<_> = answers.into_iter().collect();
    answers.sort_by_key(|(position, _)| *position);
    assert!(matches!(answers[0].1, Ok(Reply::Records(_))));
    assert!(matches!(&answers[1].1, Err(LedgerError::Summary { id, .. }) if id == "S-bad"));
    assert!(matches!(answers[2].1, Err(LedgerError::UnknownVersion { .. })));
    assert!(matches!(answers[3].1, Ok(Reply::Records(_))));
    assert_eq!(ledger.record(MODEL, "S-2").unwrap(), None, "nothing of a failed request is kept");
    assert_eq!(scored(&ledger, &live, &Stream::All), 2.0);
    assert_eq!(keep(&ledger, &live, vec![record("S-2", START, 2), record("S-4", START, 4)]), [false, true]);
    verified(&ledger);
}

pub(super) fn files_are_recognised_by_their_content(place: &dyn Place) {
    let ledger = place.open();
    let start = |name: &str, claim: &str| {
        Job::BeginFile(FileStart {
            model: MODEL.into(),
            sha256: "5f".repeat(32),
            name: name.into(),
            claim: claim.into(),
            result: format!("{name}.scored"),
            started: START,
        })
    };
    assert_eq!(ledger.write(start("monday.csv", "a")).unwrap(), Reply::File(None));
    let known = FileEntry {
        name: "monday.csv".into(),
        claim: "a".into(),
        result: "monday.csv.scored".into(),
        started: START,
        finished: None,
    };
    assert_eq!(ledger.write(start("again.csv", "b")).unwrap(), Reply::File(Some(known.clone())));
    let finish = Job::FinishFile { model: MODEL.into(), sha256: "5f".repeat(32), finished: START + HOUR };
    assert_eq!(ledger.write(finish).unwrap(), Reply::Finished);
    let finished = FileEntry { finished: Some(START + HOUR), ..known };
    assert_eq!(ledger.write(start("again.csv", "b")).unwrap(), Reply::File(Some(finished)));
}

pub(super) fn what_was_written_is_there_after_reopening(place: &dyn Place) {
    let ledger = place.open();
    let live = with_live(&ledger);
    for i in 0..40_u32 {
        // Nobody waits for these: dropping the ledger writes what is queued.
        let new = vec![record(&format!("S-{i}"), START + i64::from(i) * HOUR, i)];
        ledger.submit(Job::Records(records(&live, new)), |reply| assert!(reply.is_ok())).unwrap();
    }
    drop(ledger);
    let ledger = place.open();
    assert_eq!(ledger.counts(MODEL).unwrap().records, 40);
    let again = (0..41).map(|i| record(&format!("S-{i}"), START, i)).collect();
    let repeated = keep(&ledger, &live, again);
    assert!(repeated[..40].iter().all(|was_there| *was_there) && !repeated[40]);
    let states = observe(&ledger, (0..41).map(|i| outcome(&format!("S-{i}"), "carded", START)).collect());
    assert!(states.iter().all(|state| *state == OutcomeState::Matched));
    drop(ledger);
    let ledger = place.open();
    assert_eq!(observe(&ledger, vec![outcome("S-3", "carded", START)]), [OutcomeState::Repeated]);
    verified(&ledger);
}

pub(super) fn two_handles_see_each_other(place: &dyn Place) {
    let (one, other) = (place.open(), place.open());
    let live = with_live(&one);
    for i in 0..30_u32 {
        let (writer, reader) = if i % 2 == 0 { (&one, &other) } else { (&other, &one) };
        let id = format!("S-{i}");
        assert_eq!(keep(writer, &live, vec![record(&id, START, i)]), [false]);
        assert_eq!(keep(reader, &live, vec![record(&id, START, i)]), [true]);
        let carded: NewOutcome = outcome(&id, "carded", START);
        assert_eq!(observe(reader, vec![carded.clone()]), [OutcomeState::Matched]);
        assert_eq!(observe(writer, vec![carded]), [OutcomeState::Repeated]);
    }
    assert_eq!(scored(&one, &live, &Stream::All), 30.0);
    assert_eq!(other.counts(MODEL).unwrap().matched, 30);
    verified(&one);
}

/// Few rows, so that the other handle's are in no run and must be read from where this one stopped.
pub(super) fn a_failure_hides_nothing_that_others_write(place: &dyn Place) {
    let (one, other) = (place.open(), place.open());
    let live = with_live(&one);
    let new = |round: &str| -> Vec<NewRecord> {
        (0..5).map(|i| record(&format!("{round}-{i}"), START, i)).collect()
    };
    let mut with_bad = new("failed");
    with_bad.push(NewRecord { log_odds: vec![1.0], ..record("S-bad", START, 1) });
    assert!(one.write(Job::Records(records(&live, with_bad))).is_err());
    assert_eq!(keep(&other, &live, new("S")), [false; 5]);
    assert_eq!(keep(&one, &live, new("S")), [true; 5]);
    assert_eq!(one.counts(MODEL).unwrap().records, 5);
    verified(&one);
}

pub(super) fn damage_is_found(place: &dyn Place) {
    let ledger = place.open();
    let live = with_live(&ledger);
    keep(&ledger, &live, (0..6).map(|i| record(&format!("S-{i}"), START, i)).collect());
    verified(&ledger);
    place.alter_a_summary();
    let altered = ledger.verify().unwrap();
    assert!(altered.len() == 1 && altered[0].version == live.fingerprint, "{altered:?}");
    assert!(altered[0].day == day_of(START) && altered[0].stream != Stream::All, "{altered:?}");
    place.lose_a_record();
    let lost = ledger.verify().unwrap();
    assert!(lost.iter().any(|difference| difference.reason.contains("6 records")), "{lost:?}");
    assert!(lost.iter().any(|difference| difference.reason.starts_with(".scored")), "{lost:?}");
}

/// Times of records, of outcomes and of receipt that go backwards: everything is kept and counted.
pub(super) fn the_clock_may_go_backwards(place: &dyn Place) {
    let ledger = place.open();
    let live = with_live(&ledger);
    for i in (0..12_u32).rev() {
        let time = START + i64::from(i) * 8 * HOUR;
        let mut new = records(&live, vec![record(&format!("S-{i}"), time, i)]);
        new.received = time - DAY;
        assert_eq!(ledger.write(Job::Records(new)).unwrap(), Reply::Records(vec![false]));
        let mut known = super::parcels::outcomes(vec![outcome(&format!("S-{i}"), "carded", time - 2 * DAY)]);
        known.received = time - 3 * DAY;
        let state = ledger.write(Job::Outcomes(known)).unwrap();
        assert_eq!(state, Reply::Outcomes(vec![OutcomeState::Matched]));
    }
    let windows = ledger.summaries_of(MODEL, &live.fingerprint, &Stream::All, ALWAYS).unwrap();
    let counts: Vec<f64> = windows.iter().map(|window| window.summary.outcomes()).collect();
    assert_eq!(counts, [3.0; 4]);
    let before_1970 = vec![record("S-old", -5 * DAY - 1, 1), record("S-first", i64::MIN / 2, 2)];
    assert_eq!(keep(&ledger, &live, before_1970), [false, false]);
    assert_eq!(ledger.record(MODEL, "S-old").unwrap().unwrap().time, -5 * DAY - 1);
    verified(&ledger);
}

pub(super) fn ids_may_be_of_any_characters(place: &dyn Place) {
    let ledger = place.open();
    let live = with_live(&ledger);
    let ids = ["", " ", "a\0b", "a\u{E000}0b", "\u{202E}S-1", "'; DROP TABLE record; --", "\\N", "\n\t"];
    let with_segment = |id: &str| NewRecord { segments: vec![id.into()], ..record(id, START, 1) };
    let new = ids.iter().map(|id| with_segment(id)).collect();
    assert_eq!(keep(&ledger, &live, new), [false; 8]);
    for id in ids {
        assert_eq!(ledger.record(MODEL, id).unwrap().unwrap().id, id);
        assert_eq!(keep(&ledger, &live, vec![with_segment(id)]), [true], "{id:?}");
        let now = vec![outcome(id, "carded", START), outcome(&format!("{id}?"), "carded", START)];
        assert_eq!(observe(&ledger, now), [OutcomeState::Matched, OutcomeState::Waiting], "{id:?}");
    }
    let streams = ledger.streams(MODEL, &live.fingerprint).unwrap();
    assert!(streams.contains(&depot("a\0b")) && streams.contains(&depot("a\u{E000}0b")), "{streams:?}");
    drop(ledger);
    let ledger = place.open();
    keep(&ledger, &live, vec![NewRecord { segments: vec!["a\0b".into()], ..record("S-2", START, 1) }]);
    assert_eq!(scored(&ledger, &live, &depot("a\0b")), 2.0);
    verified(&ledger);
}

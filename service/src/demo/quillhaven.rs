//! Quillhaven Parcels: an invented parcel round, its stops made from a seed.
//!
//! The truth behind the stops is a model file, `demo-data/truth.model.json`. What happens to the
//! round over the weeks is the [`STORY`]. Every day is made from the seed and its own number, so
//! any part of the story can be made alone.

use std::fmt::Write;

use kilter_model::cells::{format_time, parse_time};
use kilter_model::{Batch, Column, MISSING_CODE, ModelFile, ModelFileError, Scorer, TextColumn};
use rand::{RngExt, SeedableRng};
use rand_chacha::ChaCha8Rng;
use rand_distr::{Distribution, Exp, LogNormal, Poisson};

/// The truth as a model file.
const TRUTH: &str = include_str!("../../../demo-data/truth.model.json");
/// The plan that the demo fits.
pub(crate) const PLAN: &str = include_str!("../../../demo-data/plan.toml");
/// First day of the story.
const FIRST_DAY: &str = "2026-03-02";
const MICROS_PER_DAY: i64 = 86_400_000_000;
const MICROS_PER_HOUR: f64 = 3_600_000_000.0;

/// What is different in a chapter.
#[derive(Debug, Clone, Copy, PartialEq, Eq)]
pub(crate) enum Change {
    /// Nothing: the stops are as the truth says.
    None,
    /// One depot leaves parcels in safe places far more often.
    SafePlaces,
    /// The rain forecast is missing from the records, while it rains on.
    SilentRain,
    /// Other stops, same chances: heavier and dearer parcels, more farms and evenings.
    Season,
}

/// Some weeks of the story.
#[derive(Debug, Clone, Copy)]
pub(crate) struct Chapter {
    /// What the demo calls it.
    pub(crate) title: &'static str,
    /// Number of its first day, counted from the first day of the story.
    pub(crate) first: u32,
    /// Number of days.
    pub(crate) days: u32,
    /// What is different.
    pub(crate) change: Change,
}

/// The story of Quillhaven Parcels.
pub(crate) const STORY: [Chapter; 7] = [
    Chapter { title: "weeks to fit on", first: 0, days: 56, change: Change::None },
    Chapter { title: "healthy weeks", first: 56, days: 28, change: Change::None },
    Chapter {
        title: "depot Oxcross leaves parcels in safe places",
        first: 84,
        days: 21,
        change: Change::SafePlaces,
    },
    Chapter { title: "healthy again", first: 105, days: 7, change: Change::None },
    Chapter { title: "the rain feed is silent", first: 112, days: 14, change: Change::SilentRain },
    Chapter { title: "healthy once more", first: 126, days: 7, change: Change::None },
    Chapter {
        title: "the fair season: other stops, same chances",
        first: 133,
        days: 28,
        change: Change::Season,
    },
];

/// The depot that changes its ways, and by how much its log-odds of a safe place rise.
const CHANGED_DEPOT: &str = "Oxcross";
const CHANGED_LOG_ODDS: f64 = 1.3;

const DEPOTS: [&str; 5] = ["Quayside", "Millgate", "Oxcross", "Tarnfield", "Saltmarsh"];
const DWELLINGS: [&str; 4] = ["house", "flat", "farm", "business"];
const TIME_BANDS: [&str; 4] = ["morning", "midday", "afternoon", "evening"];
const FIRST_HOUR_OF_BAND: [f64; 4] = [8.0, 11.0, 14.0, 17.0];

/// One stop of a van: a record, and what became of it.
#[derive(Debug, Clone, PartialEq)]
pub(crate) struct Stop {
    /// Id of the record.
    pub(crate) id: String,
    /// Planned time, microseconds since 1970.
    pub(crate) planned_at: i64,
    weight_kg: f64,
    item_value: f64,
    hours_since_dispatch: f64,
    /// What the feed delivered.
    rain_mm: Option<f64>,
    depot_km: f64,
    dwelling: usize,
    time_band: usize,
    previous_attempts: f64,
    depot: usize,
    /// The observed category.
    pub(crate) result: String,
    /// When the result became known, microseconds since 1970.
    pub(crate) known_at: i64,
}

/// Makes stops.
#[derive(Debug)]
pub(crate) struct Quillhaven {
    truth: ModelFile,
    scorer: Scorer,
    seed: u64,
    start: i64,
}

impl Quillhaven {
    /// The round that a seed makes.
    pub(crate) fn new(seed: u64) -> Result<Self, ModelFileError> {
        let truth = ModelFile::from_json(TRUTH)?;
        let scorer = Scorer::new(&truth).map_err(|error| {
            ModelFileError::Faults(vec![kilter_model::Fault {
                place: "fields".into(),
                reason: error.to_string(),
            }])
        })?;
        let start = parse_time(FIRST_DAY).ok().flatten().unwrap_or_default();
        Ok(Self { truth, scorer, seed, start })
    }

    /// Midnight (UTC) at which a day of the story begins, microseconds since 1970.
    pub(crate) fn midnight(&self, day: u32) -> i64 {
        self.start + i64::from(day) * MICROS_PER_DAY
    }

    /// A day of the story as a date.
    pub(crate) fn date(&self, day: u32) -> String {
        format_time(self.midnight(day)).chars().take(10).collect()
    }

    /// All stops of a day, ordered by planned time.
    pub(crate) fn day(&self, day: u32) -> Vec<Stop> {
        let change = STORY
            .iter()
            .find(|chapter| (chapter.first..chapter.first + chapter.days).contains(&day))
            .map_or(Change::None, |chapter| chapter.change);
        let mut random =
            ChaCha8Rng::seed_from_u64(self.seed.wrapping_mul(1_000_003).wrapping_add(u64::from(day)));
        let is_weekend = day % 7 >= 5;
        let stops = if is_weekend { 260 } else { 460 } + random.random_range(0..60);
        // Showers are local: the day sets how heavy they are, each stop whether it gets one.
        let rain_of_day = draw(&mut random, LogNormal::new(0.0, 0.15));
        let mut made: Vec<Stop> =
            (0..stops).map(|_| self.stop(day, change, rain_of_day, &mut random)).collect();
        made.sort_by_key(|stop| stop.planned_at);
        for (number, stop) in made.iter_mut().enumerate() {
            // Ids carry a random part, as ids in real life do.
            stop.id = format!("S{day:03}-{number:04}-{:06x}", random.random_range(0..0x0100_0000));
        }
        made
    }

    fn stop(&self, day: u32, change: Change, rain_of_day: f64, random: &mut ChaCha8Rng) -> Stop {
        let season = change == Change::Season;
        let dwelling =
            pick(random, if season { &[0.42, 0.20, 0.28, 0.10] } else { &[0.52, 0.28, 0.08, 0.12] });
        let time_band =
            pick(random, if season { &[0.2, 0.2, 0.25, 0.35] } else { &[0.35, 0.25, 0.25, 0.15] });
        let depot = pick(random, &[0.26, 0.22, 0.2, 0.18, 0.14]);
        let heavier = if season { 0.5 } else { 0.0 };
        let dearer = if season { 0.8 } else { 0.0 };
        let wet = random.random::<f64>() < 0.55;
        let rain = if wet { round_to(rain_of_day * draw(random, Exp::new(0.22)), 10.0) } else { 0.0 };
        let hour = FIRST_HOUR_OF_BAND[time_band] + 3.0 * random.random::<f64>();
        let planned_at = self.midnight(day) + (hour * 3600.0).round() as i64 * 1_000_000;
        let mut stop = Stop {
            id: String::new(),
            planned_at,
            weight_kg: round_to(draw(random, LogNormal::new(0.6 + heavier, 0.8)).clamp(0.05, 60.0), 100.0),
            item_value: round_to(draw(random, LogNormal::new(3.3 + dearer, 1.0)).min(9000.0), 100.0),
            hours_since_dispatch: round_to(6.0 + draw(random, Exp::new(1.0 / 18.0)).min(200.0), 10.0),
            rain_mm: Some(rain),
            depot_km: round_to(1.0 + draw(random, LogNormal::new(2.1, 0.6)).min(80.0), 10.0),
            dwelling,
            time_band,
            previous_attempts: draw(random, Poisson::new(0.15)).min(5.0),
            depot,
            result: String::new(),
            known_at: 0,
        };
        let shift = if change == Change::SafePlaces && DEPOTS[depot] == CHANGED_DEPOT {
            CHANGED_LOG_ODDS
        } else {
            0.0
        };
        let result = self.result(&stop, shift, random);
        self.truth.outcome.categories[result].clone_into(&mut stop.result);
        stop.known_at = planned_at + (delay_in_hours(result, random) * MICROS_PER_HOUR) as i64;
        if change == Change::SilentRain {
            stop.rain_mm = None;
        }
        stop
    }

    /// Draws the result from the true chances, with the log-odds of a safe place shifted.
    fn result(&self, stop: &Stop, safe_place_shift: f64, random: &mut ChaCha8Rng) -> usize {
        let scored = self.scorer.score(&as_batch(stop));
        let mut chances = scored.probabilities_of(0).to_vec();
        chances[1] *= safe_place_shift.exp();
        let total: f64 = chances.iter().sum();
        for chance in &mut chances {
            *chance /= total;
        }
        pick(random, &chances)
    }
}

/// Hours until a result is known: a hand-over at once, a safe place at the end of the round, a
/// neighbour by the next day, a card when the customer has come for the parcel.
fn delay_in_hours(result: usize, random: &mut ChaCha8Rng) -> f64 {
    let spread = random.random::<f64>();
    match result {
        0 => 0.2 + spread,
        1 => 6.0 + 6.0 * spread,
        2 => 12.0 + 24.0 * spread,
        _ => 20.0 + 92.0 * spread,
    }
}

fn pick(random: &mut ChaCha8Rng, chances: &[f64]) -> usize {
    let mut left = random.random::<f64>();
    for (index, chance) in chances.iter().enumerate() {
        left -= chance;
        if left < 0.0 {
            return index;
        }
    }
    chances.len() - 1
}

/// Draws from a distribution; a distribution that cannot be made gives 0.
fn draw<D: Distribution<f64>, E>(random: &mut ChaCha8Rng, distribution: Result<D, E>) -> f64 {
    distribution.map_or(0.0, |distribution| distribution.sample(random))
}

fn round_to(value: f64, steps: f64) -> f64 {
    (value * steps).round() / steps
}

fn as_batch(stop: &Stop) -> Batch {
    let number = |value: f64| Column::Number(vec![value]);
    let text = |value: &str| {
        let code = if value.is_empty() { MISSING_CODE } else { 0 };
        Column::Text(TextColumn { codes: vec![code], dictionary: vec![value.to_owned()] })
    };
    let columns = vec![
        number(stop.weight_kg),
        number(stop.item_value),
        number(stop.hours_since_dispatch),
        number(stop.rain_mm.unwrap_or(f64::NAN)),
        number(stop.depot_km),
        text(DWELLINGS[stop.dwelling]),
        text(TIME_BANDS[stop.time_band]),
        number(stop.previous_attempts),
        text(DEPOTS[stop.depot]),
    ];
    Batch { rows: 1, columns, bad_cells: Vec::new() }
}

/// Names of the columns of a record, in order.
const COLUMNS: [&str; 11] = [
    "stop_id",
    "planned_at",
    "weight_kg",
    "item_value",
    "hours_since_dispatch",
    "rain_mm",
    "depot_km",
    "dwelling",
    "time_band",
    "previous_attempts",
    "depot",
];

impl Stop {
    /// The record as cells of text, in the order of the columns.
    fn cells(&self) -> [String; 11] {
        [
            self.id.clone(),
            format_time(self.planned_at),
            self.weight_kg.to_string(),
            self.item_value.to_string(),
            self.hours_since_dispatch.to_string(),
            self.rain_mm.map_or_else(String::new, |rain| rain.to_string()),
            self.depot_km.to_string(),
            DWELLINGS[self.dwelling].to_owned(),
            TIME_BANDS[self.time_band].to_owned(),
            self.previous_attempts.to_string(),
            DEPOTS[self.depot].to_owned(),
        ]
    }

    /// The record as a JSON object.
    pub(crate) fn json(&self) -> serde_json::Value {
        let is_number = |column: usize| (2..=6).contains(&column) || column == 9;
        let value = |column: usize, cell: String| match cell.parse::<f64>() {
            Ok(number) if is_number(column) => serde_json::Value::from(number),
            _ if cell.is_empty() => serde_json::Value::Null,
            _ => serde_json::Value::from(cell),
        };
        let cells = self.cells().into_iter().enumerate();
        cells.map(|(column, cell)| (COLUMNS[column].to_owned(), value(column, cell))).collect()
    }
}

impl Stop {
    /// The outcome as a JSON object.
    pub(crate) fn outcome(&self) -> serde_json::Value {
        serde_json::json!({ "id": self.id, "category": self.result, "observed_at": format_time(self.known_at) })
    }
}

/// Stops as a CSV table, with their results where they are to fit on.
pub(crate) fn csv(stops: &[Stop], with_result: bool) -> String {
    let mut text = COLUMNS.join(",");
    text.push_str(if with_result { ",result\n" } else { "\n" });
    for stop in stops {
        text.push_str(&stop.cells().join(","));
        if with_result {
            text.push(',');
            text.push_str(&stop.result);
        }
        text.push('\n');
    }
    text
}

/// Outcomes as a CSV table.
pub(crate) fn outcomes_csv<'a>(stops: impl IntoIterator<Item = &'a Stop>) -> String {
    let mut text = String::from("id,category,observed_at\n");
    for stop in stops {
        // Writing to a string cannot fail.
        let _ = writeln!(text, "{},{},{}", stop.id, stop.result, format_time(stop.known_at));
    }
    text
}

#[cfg(test)]
mod tests {
    use super::*;

    #[test]
    fn the_same_seed_makes_the_same_stops() {
        let (one, two) = (Quillhaven::new(7).unwrap(), Quillhaven::new(7).unwrap());
        assert_eq!(one.day(90), two.day(90));
        assert_ne!(one.day(90), Quillhaven::new(8).unwrap().day(90));
    }

    /// The changed depot's share of safe places rises by the factor that the story says, and only
    /// there; tolerance: three standard errors of the shares.
    #[test]
    fn the_story_is_in_the_stops() {
        let round = Quillhaven::new(1).unwrap();
        let share = |chapter: Chapter, here: bool| {
            let days = chapter.first..chapter.first + chapter.days;
            let stops: Vec<Stop> = days.flat_map(|day| round.day(day)).collect();
            let there: Vec<&Stop> =
                stops.iter().filter(|s| (DEPOTS[s.depot] == CHANGED_DEPOT) == here).collect();
            there.iter().filter(|s| s.result == "safe-place").count() as f64 / there.len() as f64
        };
        assert!((share(STORY[1], false) - share(STORY[2], false)).abs() < 0.02);
        assert!(share(STORY[2], true) > 1.6 * share(STORY[1], true));
        assert!(round.day(STORY[4].first).iter().all(|stop| stop.rain_mm.is_none()));
        assert!(round.day(0).iter().all(|stop| stop.known_at > stop.planned_at));
    }
}

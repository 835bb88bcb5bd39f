//! Parquet and Arrow files into batches, through polars' streaming engine.

use std::collections::HashMap;
use std::num::NonZeroUsize;
use std::panic::{AssertUnwindSafe, catch_unwind};
use std::path::{Path, PathBuf};
use std::sync::{Arc, Mutex, PoisonError};

use kilter_model::cells::{parse_flag, parse_number, parse_time};
use kilter_model::{
    BadCell, Batch, CellKind, Column, ColumnSpec, MISSING_CODE, MISSING_FLAG, MISSING_TIME, TextColumn,
};
use polars::prelude::{
    AnyValue, DataFrame, DataType, Engine, IpcScanOptions, LazyFrame, PlRefPath, PlanCallback, PolarsError,
    PolarsResult, ScanArgsParquet, Series, TimeUnit, UnifiedScanArgs,
};

use crate::error::TableError;
use crate::format::Format;
use crate::reader::{ReadOptions, Source, places};
use crate::rows::{Rows, TableBatch, push_text};

const MICROS_PER_DAY: i64 = 86_400_000_000;

/// A Parquet or Arrow file being read.
pub(crate) struct ColumnarSource {
    path: PathBuf,
    format: Format,
    frame: LazyFrame,
    names: Vec<String>,
    places: Vec<Option<usize>>,
    options: ReadOptions,
}

impl ColumnarSource {
    pub(crate) fn open(path: &Path, format: Format, options: ReadOptions) -> Result<Self, TableError> {
        let text = path.to_str().ok_or_else(|| {
            TableError::malformed(path, format.name(), "its path is not UTF-8, which this format needs")
        })?;
        let scan = || -> PolarsResult<(LazyFrame, Vec<String>)> {
            let place = PlRefPath::new(text);
            let mut frame = match format {
                Format::Arrow => {
                    LazyFrame::scan_ipc(place, IpcScanOptions::default(), UnifiedScanArgs::default())?
                }
                _ => LazyFrame::scan_parquet(place, ScanArgsParquet { glob: false, ..Default::default() })?,
            };
            let names = frame.collect_schema()?.iter_names().map(ToString::to_string).collect();
            Ok((frame, names))
        };
        let (frame, names) = without_panic(path, format, scan)?;
        let places = places(path, &options.columns, &names)?;
        Ok(Self { path: path.to_owned(), format, frame, names, places, options })
    }

    fn batch(&self, frame: DataFrame, first_row: u64) -> TableBatch {
        let mut batch = Batch { rows: frame.height(), ..Batch::default() };
        for (spec, place) in self.options.columns.iter().zip(&self.places) {
            let series = place.map(|place| frame.columns()[place].as_materialized_series().clone());
            let mut cells = ColumnarCells { spec, bad_cells: &mut batch.bad_cells };
            batch.columns.push(cells.column(series.as_ref(), batch.rows));
        }
        batch.bad_cells.sort_by_key(|cell| cell.row);
        let rows = if self.options.carry { Rows::Frame(Arc::new(frame)) } else { Rows::NotCarried };
        TableBatch { first_row, batch, lines: Vec::new(), rows }
    }
}

impl Source for ColumnarSource {
    fn column_names(&self) -> &[String] {
        &self.names
    }

    fn run(self: Box<Self>, deliver: &mut dyn FnMut(Result<TableBatch, TableError>) -> bool) {
        // The engine calls back from threads of its own: frames go through a channel of one.
        let (sender, frames) = std::sync::mpsc::sync_channel::<DataFrame>(1);
        let sender = Mutex::new(sender);
        let callback = move |frame: DataFrame| -> PolarsResult<bool> {
            let wanted = sender.lock().unwrap_or_else(PoisonError::into_inner).send(frame).is_ok();
            Ok(!wanted)
        };
        let (lazy, path, format) = (self.frame.clone(), self.path.clone(), self.format);
        let rows = NonZeroUsize::new(self.options.batch_rows);
        let engine = std::thread::spawn(move || {
            without_panic(&path, format, || {
                let sink = lazy.sink_batches(PlanCallback::new(callback), true, rows)?;
                sink.collect_with_engine(Engine::Streaming).map(|_| ())
            })
        });
        let mut first_row = 0;
        for frame in &frames {
            let batch = self.batch(frame, first_row);
            first_row += batch.batch.rows as u64;
            if batch.batch.rows > 0 && !deliver(Ok(batch)) {
                drop(frames);
                break;
            }
        }
        let ended = engine.join().unwrap_or_else(|_| {
            Err(TableError::malformed(&self.path, self.format.name(), "its reader failed"))
        });
        if let Err(error) = ended {
            deliver(Err(error));
        }
    }
}

/// Runs something of polars: files that are cut short or spoilt make some of its decoders panic.
fn without_panic<T>(
    path: &Path,
    format: Format,
    run: impl FnOnce() -> PolarsResult<T>,
) -> Result<T, TableError> {
    match catch_unwind(AssertUnwindSafe(run)) {
        Ok(Ok(value)) => Ok(value),
        Ok(Err(PolarsError::IO { error, .. })) if error.kind() == std::io::ErrorKind::NotFound => {
            Err(TableError::read(path, error.kind().into()))
        }
        Ok(Err(error)) => Err(TableError::malformed(path, format.name(), error)),
        Err(_) => Err(TableError::malformed(path, format.name(), "its content is damaged")),
    }
}

/// One column of a frame being converted.
struct ColumnarCells<'a> {
    spec: &'a ColumnSpec,
    bad_cells: &'a mut Vec<BadCell>,
}

impl ColumnarCells<'_> {
    fn column(&mut self, series: Option<&Series>, rows: usize) -> Column {
        match (self.spec.kind, series) {
            (CellKind::Number, None) => Column::Number(vec![f64::NAN; rows]),
            (CellKind::Text, None) => {
                Column::Text(TextColumn { codes: vec![MISSING_CODE; rows], dictionary: Vec::new() })
            }
            (CellKind::Flag, None) => Column::Flag(vec![MISSING_FLAG; rows]),
            (CellKind::Time, None) => Column::Time(vec![MISSING_TIME; rows]),
            (CellKind::Number, Some(series)) => Column::Number(self.numbers(series)),
            (CellKind::Text, Some(series)) => Column::Text(texts(series)),
            (CellKind::Flag, Some(series)) => Column::Flag(self.cells(series, MISSING_FLAG, flag_of)),
            (CellKind::Time, Some(series)) => Column::Time(self.cells(series, MISSING_TIME, time_of)),
        }
    }

    fn numbers(&mut self, series: &Series) -> Vec<f64> {
        if series.dtype().is_primitive_numeric()
            && let Ok(cast) = series.cast(&DataType::Float64)
            && let Ok(numbers) = cast.f64()
        {
            let mut values = Vec::with_capacity(numbers.len());
            for (row, number) in numbers.iter().enumerate() {
                let number = number.unwrap_or(f64::NAN);
                if number.is_infinite() {
                    self.bad(row, format!("`{number}` is not a finite number"));
                }
                values.push(if number.is_finite() { number } else { f64::NAN });
            }
            return values;
        }
        self.cells(series, f64::NAN, number_of)
    }

    /// Converts cell by cell.
    fn cells<T: Copy>(
        &mut self,
        series: &Series,
        missing: T,
        convert: impl Fn(&AnyValue) -> Result<Option<T>, String>,
    ) -> Vec<T> {
        let mut cells = Vec::with_capacity(series.len());
        for (row, value) in series.iter().enumerate() {
            cells.push(match convert(&value) {
                Ok(cell) => cell.unwrap_or(missing),
                Err(reason) => {
                    self.bad(row, reason);
                    missing
                }
            });
        }
        cells
    }

    fn bad(&mut self, row: usize, reason: String) {
        self.bad_cells.push(BadCell { row, field: self.spec.name.clone(), reason });
    }
}

fn number_of(value: &AnyValue) -> Result<Option<f64>, String> {
    match (value, value.get_str()) {
        (AnyValue::Null, _) => Ok(None),
        (_, Some(text)) => parse_number(text),
        _ => Err(format!("`{value}` is not a number")),
    }
}

fn flag_of(value: &AnyValue) -> Result<Option<u8>, String> {
    match (value, value.get_str(), value.extract::<i64>()) {
        (AnyValue::Null, _, _) => Ok(None),
        (AnyValue::Boolean(flag), _, _) => Ok(Some(u8::from(*flag))),
        (_, Some(text), _) => parse_flag(text).map(|flag| flag.map(u8::from)),
        (_, None, Some(number @ 0..=1)) => Ok(Some(u8::from(number == 1))),
        _ => Err(format!("`{value}` is not a flag: expected true or false")),
    }
}

fn time_of(value: &AnyValue) -> Result<Option<i64>, String> {
    let micros = |time: i64, unit: TimeUnit| match unit {
        TimeUnit::Nanoseconds => time.div_euclid(1000),
        TimeUnit::Microseconds => time,
        TimeUnit::Milliseconds => time.saturating_mul(1000),
    };
    match (value, value.get_str()) {
        (AnyValue::Null, _) => Ok(None),
        (AnyValue::Datetime(time, unit, _), _) => Ok(Some(micros(*time, *unit))),
        (AnyValue::DatetimeOwned(time, unit, _), _) => Ok(Some(micros(*time, *unit))),
        (AnyValue::Date(days), _) => Ok(Some(i64::from(*days) * MICROS_PER_DAY)),
        (_, Some(text)) => parse_time(text),
        _ => Err(format!("`{value}` is not a time")),
    }
}

fn texts(series: &Series) -> TextColumn {
    let mut texts = TextColumn::default();
    let mut codes = HashMap::new();
    for value in series.iter() {
        push_text(&mut texts, &mut codes, &text_of(&value));
    }
    texts
}

/// A cell as text: empty where missing; whole floating-point numbers without `.0`, as tools turn
/// columns of whole numbers with gaps into those.
pub(crate) fn text_of(value: &AnyValue) -> String {
    match value {
        AnyValue::Null => String::new(),
        AnyValue::Boolean(flag) => flag.to_string(),
        AnyValue::Float64(number) => number.to_string(),
        AnyValue::Float32(number) => number.to_string(),
        AnyValue::Datetime(..) | AnyValue::DatetimeOwned(..) => match time_of(value) {
            Ok(Some(time)) => kilter_model::cells::format_time(time),
            _ => value.to_string(),
        },
        value => value.get_str().map_or_else(|| value.to_string(), str::to_owned),
    }
}

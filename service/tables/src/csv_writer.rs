//! CSV out.

use std::io::{self, BufWriter, Write};

/// A stream for CSV that is compressed as the format says.
pub(crate) enum CsvStream {
    Plain(Box<dyn Write + Send>),
    Gzip(flate2::write::GzEncoder<Box<dyn Write + Send>>),
    Zstd(zstd::Encoder<'static, Box<dyn Write + Send>>),
}

impl Write for CsvStream {
    fn write(&mut self, bytes: &[u8]) -> io::Result<usize> {
        match self {
            Self::Plain(stream) => stream.write(bytes),
            Self::Gzip(stream) => stream.write(bytes),
            Self::Zstd(stream) => stream.write(bytes),
        }
    }

    fn flush(&mut self) -> io::Result<()> {
        match self {
            Self::Plain(stream) => stream.flush(),
            Self::Gzip(stream) => stream.flush(),
            Self::Zstd(stream) => stream.flush(),
        }
    }
}

impl CsvStream {
    /// Ends the compression.
    pub(crate) fn end(self) -> io::Result<()> {
        match self {
            Self::Plain(mut stream) => stream.flush(),
            Self::Gzip(stream) => stream.finish()?.flush(),
            Self::Zstd(stream) => stream.finish()?.flush(),
        }
    }
}

/// A CSV file being written.
pub(crate) type CsvWriter = csv::Writer<BufWriter<CsvStream>>;

/// A writer with its head written.
pub(crate) fn csv_writer(stream: CsvStream, head: &[String]) -> io::Result<CsvWriter> {
    let mut writer = csv::WriterBuilder::new().from_writer(BufWriter::with_capacity(1 << 18, stream));
    writer.write_record(head).map_err(io::Error::other)?;
    Ok(writer)
}

/// Writes all that is buffered and ends the stream.
pub(crate) fn end(writer: CsvWriter) -> io::Result<()> {
    let buffered = writer.into_inner().map_err(|error| io::Error::other(error.to_string()))?;
    buffered.into_inner().map_err(io::IntoInnerError::into_error)?.end()
}

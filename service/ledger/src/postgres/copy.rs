//! Sending rows in PostgreSQL's binary COPY format, as its manual has it under "COPY".

use std::io::Write;

use postgres::CopyInWriter;

use crate::error::LedgerError;

const SIGNATURE: &[u8; 11] = b"PGCOPY\n\xFF\r\n\0";
/// Neither flags nor an extension of the header.
const HEADER_END: [u8; 8] = [0; 8];
const END: i16 = -1;
/// Bytes that are sent at a time.
const CHUNK: usize = 1 << 16;

/// Rows on their way to a table.
pub(super) struct Copy<'a> {
    writer: CopyInWriter<'a>,
    buffer: Vec<u8>,
    columns: u16,
}

impl<'a> Copy<'a> {
    pub(super) fn new(writer: CopyInWriter<'a>, columns: u16) -> Self {
        let mut buffer = Vec::with_capacity(CHUNK + 4096);
        buffer.extend_from_slice(SIGNATURE);
        buffer.extend_from_slice(&HEADER_END);
        Self { writer, buffer, columns }
    }

    /// Begins a row; as many values follow as there are columns.
    pub(super) fn row(&mut self) -> Result<&mut Self, LedgerError> {
        if self.buffer.len() >= CHUNK {
            self.send()?;
        }
        self.buffer.extend_from_slice(&self.columns.to_be_bytes());
        Ok(self)
    }

    pub(super) fn number(&mut self, value: i64) -> &mut Self {
        self.bytes(&value.to_be_bytes())
    }

    /// A text, or bytes as they are.
    pub(super) fn bytes(&mut self, value: &[u8]) -> &mut Self {
        self.length(value.len());
        self.buffer.extend_from_slice(value);
        self
    }

    /// Numbers as bytes, the way the tables keep them.
    pub(super) fn floats(&mut self, values: &[f64]) -> &mut Self {
        self.length(8 * values.len());
        for value in values {
            self.buffer.extend_from_slice(&value.to_le_bytes());
        }
        self
    }

    /// No value.
    pub(super) fn null(&mut self) -> &mut Self {
        self.buffer.extend_from_slice(&(-1_i32).to_be_bytes());
        self
    }

    /// Ends the rows; the number of rows is known to the server then.
    pub(super) fn finish(mut self) -> Result<(), LedgerError> {
        self.buffer.extend_from_slice(&END.to_be_bytes());
        self.send()?;
        self.writer.finish()?;
        Ok(())
    }

    /// Values are limited by the size of a request, far below what a length can say.
    fn length(&mut self, bytes: usize) {
        self.buffer.extend_from_slice(&(bytes as i32).to_be_bytes());
    }

    fn send(&mut self) -> Result<(), LedgerError> {
        let sent = self.writer.write_all(&self.buffer).and_then(|()| self.writer.flush());
        self.buffer.clear();
        sent.map_err(LedgerError::sending)
    }
}

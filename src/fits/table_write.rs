//! Writing binary tables, row by row.

use super::{FitsError, FitsWriter, Header};

/// A column to be written.
#[derive(Debug, Clone)]
pub struct ColumnSpec {
    name: String,
    letter: char,
    repeat: usize,
    unit: String,
}

impl ColumnSpec {
    fn new(name: &str, letter: char, repeat: usize, unit: &str) -> ColumnSpec {
        ColumnSpec { name: name.to_string(), letter, repeat, unit: unit.to_string() }
    }
    /// Text of a fixed length.
    pub fn text(name: &str, length: usize) -> ColumnSpec {
        ColumnSpec::new(name, 'A', length, "")
    }
    /// 32-bit integers.
    pub fn i32(name: &str, repeat: usize, unit: &str) -> ColumnSpec {
        ColumnSpec::new(name, 'J', repeat, unit)
    }
    /// 32-bit floats.
    pub fn f32(name: &str, repeat: usize, unit: &str) -> ColumnSpec {
        ColumnSpec::new(name, 'E', repeat, unit)
    }
    /// 64-bit floats.
    pub fn f64(name: &str, repeat: usize, unit: &str) -> ColumnSpec {
        ColumnSpec::new(name, 'D', repeat, unit)
    }

    fn width(&self) -> usize {
        let size = match self.letter {
            'A' => 1,
            'D' => 8,
            _ => 4,
        };
        self.repeat * size
    }
}

/// Writes the cells of a table in order: row after row, column after column. [`end`](Self::end) checks that all
/// announced rows came.
pub struct TableWriter<'a> {
    writer: &'a mut FitsWriter,
    columns: Vec<ColumnSpec>,
    name: String,
    rows: usize,
    cells: usize,
    bytes: Vec<u8>,
}

impl FitsWriter {
    /// Begins a binary table of `rows` rows. An empty primary header is put in front when nothing was written before.
    ///
    /// # Errors
    /// When a keyword is not allowed or writing fails.
    pub fn table(
        &mut self,
        name: &str,
        header: &Header,
        columns: Vec<ColumnSpec>,
        rows: usize,
    ) -> Result<TableWriter<'_>, FitsError> {
        if self.is_empty() {
            self.empty_primary(&Header::new())?;
        }
        let mut mandatory = Header::new();
        mandatory
            .set("XTENSION", "BINTABLE", "binary table extension")
            .set("BITPIX", 8, "bytes")
            .set("NAXIS", 2, "rows of bytes")
            .set("NAXIS1", columns.iter().map(ColumnSpec::width).sum::<usize>(), "bytes in a row")
            .set("NAXIS2", rows, "rows")
            .set("PCOUNT", 0, "")
            .set("GCOUNT", 1, "")
            .set("TFIELDS", columns.len(), "columns");
        for (n, column) in columns.iter().enumerate() {
            mandatory.set(&format!("TTYPE{}", n + 1), column.name.as_str(), "");
            mandatory.set(&format!("TFORM{}", n + 1), format!("{}{}", column.repeat, column.letter), "");
            if !column.unit.is_empty() {
                mandatory.set(&format!("TUNIT{}", n + 1), column.unit.as_str(), "");
            }
        }
        mandatory.set("EXTNAME", name, "name of this table");
        self.header(header, &mandatory)?;
        Ok(TableWriter { writer: self, columns, name: name.to_string(), rows, cells: 0, bytes: Vec::new() })
    }
}

impl TableWriter<'_> {
    /// Checks that the next cell is of this kind and length, and counts it.
    fn next_cell(&mut self, letter: char, count: usize) -> Result<usize, FitsError> {
        let at = self.cells.checked_rem(self.columns.len());
        match at.and_then(|at| self.columns.get(at)) {
            Some(c) if self.cells / self.columns.len() < self.rows && c.letter == letter && c.repeat == count => {
                self.cells += 1;
                Ok(c.repeat)
            }
            wanted => {
                let expected = match wanted {
                    Some(c) => format!(
                        "{} of {} rows of {}{} for {}",
                        self.cells / self.columns.len(),
                        self.rows,
                        c.repeat,
                        c.letter,
                        c.name
                    ),
                    None => "no cell in a table without columns".to_string(),
                };
                Err(self.writer.unwritable(&format!("table {}", self.name), &format!("{count}{letter}"), &expected))
            }
        }
    }

    fn flush(&mut self, least: usize) -> Result<(), FitsError> {
        if self.bytes.len() >= least {
            self.writer.bytes(&self.bytes)?;
            self.bytes.clear();
        }
        Ok(())
    }

    /// Writes a text cell, blank-filled; characters outside printable ASCII become `?`.
    ///
    /// # Errors
    /// When the text is longer than the column, another kind of cell is due, or writing fails.
    pub fn text(&mut self, text: &str) -> Result<(), FitsError> {
        let width = self.columns.get(self.cells % self.columns.len().max(1)).map_or(0, |c| c.repeat);
        let length = text.chars().count();
        if length > width {
            let expected = format!("at most {width} characters");
            return Err(self.writer.unwritable(&format!("table {}", self.name), &format!("{text:?}"), &expected));
        }
        self.next_cell('A', width)?;
        self.bytes.extend(text.chars().map(|c| if (' '..='~').contains(&c) { c as u8 } else { b'?' }));
        self.bytes.resize(self.bytes.len() + width - length, b' ');
        self.flush(1 << 16)
    }

    /// Writes a cell of 32-bit integers.
    ///
    /// # Errors
    /// When another cell is due or writing fails.
    pub fn i32(&mut self, values: &[i32]) -> Result<(), FitsError> {
        self.next_cell('J', values.len())?;
        self.bytes.extend(values.iter().flat_map(|v| v.to_be_bytes()));
        self.flush(1 << 16)
    }

    /// Writes a cell of 32-bit floats.
    ///
    /// # Errors
    /// When another cell is due or writing fails.
    pub fn f32(&mut self, values: &[f32]) -> Result<(), FitsError> {
        self.next_cell('E', values.len())?;
        self.bytes.extend(values.iter().flat_map(|v| v.to_be_bytes()));
        self.flush(1 << 16)
    }

    /// Writes a cell of 64-bit floats.
    ///
    /// # Errors
    /// When another cell is due or writing fails.
    pub fn f64(&mut self, values: &[f64]) -> Result<(), FitsError> {
        self.next_cell('D', values.len())?;
        self.bytes.extend(values.iter().flat_map(|v| v.to_be_bytes()));
        self.flush(1 << 16)
    }

    /// Ends the table.
    ///
    /// # Errors
    /// When cells are missing or writing fails.
    pub fn end(mut self) -> Result<(), FitsError> {
        let expected = self.rows * self.columns.len();
        if self.cells != expected {
            let (found, expected) = (format!("{} cells", self.cells), format!("{expected}"));
            return Err(self.writer.unwritable(&format!("table {}", self.name), &found, &expected));
        }
        self.flush(0)?;
        self.writer.pad(self.rows * self.columns.iter().map(ColumnSpec::width).sum::<usize>())
    }
}

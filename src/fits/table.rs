//! Reading binary tables (FITS Standard 4.0, §7.3), a block of rows at a time.

use super::big_endian::NumberKind;
use super::{FitsError, FitsFile, FitsProblem, Hdu, HduKind};

/// Bytes of rows read at a time when a table is walked through.
const CHUNK: u64 = 1 << 20;

/// What a column holds, by the letter of TFORM.
#[derive(Debug, Clone, Copy, PartialEq, Eq)]
pub enum ColumnKind {
    /// L: one byte, T or F.
    Logical,
    /// X: bits.
    Bits,
    /// A: characters; the repeat count is the length of the string.
    Text,
    /// B, I, J, K, E, D: numbers.
    Number(NumberKind),
    /// C, M: pairs of numbers.
    Complex(NumberKind),
    /// P, Q: a pointer into the heap; its array is not read here.
    Pointer,
}

/// One column.
#[derive(Debug, Clone)]
pub struct Column {
    /// TTYPE, without trailing blanks.
    pub name: String,
    /// TUNIT; empty when absent.
    pub unit: String,
    /// What it holds.
    pub kind: ColumnKind,
    /// How many to a row.
    pub repeat: usize,
    /// Where it begins in the row, bytes.
    pub offset: usize,
    /// Its length in the row, bytes.
    pub width: usize,
    /// TSCAL.
    pub scale: f64,
    /// TZERO.
    pub zero: f64,
    /// TNULL.
    pub null: Option<i64>,
}

impl Column {
    fn bytes<'a>(&self, row: &'a [u8]) -> &'a [u8] {
        row.get(self.offset..self.offset.saturating_add(self.width)).unwrap_or(&[])
    }

    /// Number `element` of this column in a row: scaled, NaN where it is TNULL, or `None` when the column has no such
    /// element or holds no numbers.
    pub fn number(&self, row: &[u8], element: usize) -> Option<f64> {
        let ColumnKind::Number(kind) = self.kind else { return None };
        if element >= self.repeat {
            return None;
        }
        let stored = kind.get(self.bytes(row).get(element * kind.size()..)?);
        if kind.is_integer() && self.null.is_some_and(|null| null as f64 == stored) {
            return Some(f64::NAN);
        }
        Some(stored * self.scale + self.zero)
    }

    /// The text of this column in a row, to its first NUL, without trailing blanks; `None` when it holds no text.
    pub fn text(&self, row: &[u8]) -> Option<String> {
        if self.kind != ColumnKind::Text {
            return None;
        }
        let bytes = self.bytes(row).split(|b| *b == 0).next().unwrap_or(&[]);
        let text: String =
            bytes.iter().map(|b| if (b' '..=b'~').contains(b) { char::from(*b) } else { '?' }).collect();
        Some(text.trim_end().to_string())
    }

    /// What it is, for messages.
    pub fn describe(&self) -> String {
        format!("{} × {:?}", self.repeat, self.kind)
    }
}

/// The layout of a binary table.
#[derive(Debug, Clone)]
pub struct Table {
    /// Which table, for messages.
    pub label: String,
    /// Columns in order.
    pub columns: Vec<Column>,
    /// Bytes of a row.
    pub row_bytes: usize,
    /// Number of rows.
    pub rows: u64,
    /// Where the first row begins in the file.
    pub start: u64,
}

/// Letters and digits in capitals: the names of columns are written with blanks, dots and underscores at will.
fn plain(name: &str) -> String {
    name.chars().filter(char::is_ascii_alphanumeric).map(|c| c.to_ascii_uppercase()).collect()
}

impl Table {
    /// The layout of the table that `hdu` describes.
    ///
    /// # Errors
    /// When it is not a binary table, or its columns do not add up to a row.
    pub fn new(hdu: &Hdu) -> Result<Table, FitsProblem> {
        let header = &hdu.header;
        if hdu.kind != HduKind::BinaryTable {
            return Err(header.complain("XTENSION", "'BINTABLE'"));
        }
        let [row_bytes, rows] = hdu.axes[..] else { return Err(header.complain("NAXIS", "2")) };
        if hdu.number != NumberKind::U8 {
            return Err(header.complain("BITPIX", "8"));
        }
        if hdu.gcount != 1 {
            return Err(header.complain("GCOUNT", "1"));
        }
        let row_bytes = usize::try_from(row_bytes).map_err(|_| header.complain("NAXIS1", "a shorter row"))?;
        let fields = header.count("TFIELDS")?;
        if fields > 999 {
            return Err(header.complain("TFIELDS", "0 to 999"));
        }
        let mut columns = Vec::new();
        let mut offset = 0usize;
        for n in 1..=fields {
            let keyword = format!("TFORM{n}");
            let form = header.text(&keyword)?.unwrap_or_default();
            let (kind, repeat, width) =
                parse_form(&form).ok_or_else(|| header.complain(&keyword, "a binary table format such as '8A'"))?;
            let name = header.text(&format!("TTYPE{n}"))?.unwrap_or_default();
            let unit = header.text(&format!("TUNIT{n}"))?.unwrap_or_default();
            let scale = header.float(&format!("TSCAL{n}"))?.unwrap_or(1.0);
            let zero = header.float(&format!("TZERO{n}"))?.unwrap_or(0.0);
            let null = header.integer(&format!("TNULL{n}"))?;
            columns.push(Column { name, unit, kind, repeat, offset, width, scale, zero, null });
            offset = offset
                .checked_add(width)
                .filter(|end| *end <= row_bytes)
                .ok_or_else(|| header.complain(&keyword, &format!("columns that fit in NAXIS1 = {row_bytes}")))?;
        }
        if offset != row_bytes {
            return Err(header.complain("NAXIS1", &format!("{offset}, the sum of the columns")));
        }
        let label = header.label().to_string();
        Ok(Table { label, columns, row_bytes, rows, start: hdu.data_start })
    }

    /// The first column of one of these names, compared by letters and digits only.
    pub fn find(&self, names: &[&str]) -> Option<&Column> {
        names.iter().find_map(|name| self.columns.iter().find(|column| plain(&column.name) == plain(name)))
    }

    /// As [`find`](Self::find), for a column of numbers with at least `repeat` elements that must be there.
    ///
    /// # Errors
    /// When there is none or it holds something else.
    pub fn numbers(&self, names: &[&str], repeat: usize) -> Result<&Column, FitsProblem> {
        let found = self.find(names);
        match found {
            Some(column) if matches!(column.kind, ColumnKind::Number(_)) && column.repeat >= repeat => Ok(column),
            _ => Err(FitsProblem::Column {
                hdu: self.label.clone(),
                column: names.join(" or "),
                found: found.map_or("no such column".to_string(), Column::describe),
                expected: format!("a column of {repeat} or more numbers"),
            }),
        }
    }

    /// Calls `visit` with the number (from 0) and bytes of every row.
    ///
    /// # Errors
    /// When the rows cannot be read, or what `visit` returns.
    pub fn for_each_row<E: From<FitsError>>(
        &self,
        file: &FitsFile,
        mut visit: impl FnMut(u64, &[u8]) -> Result<(), E>,
    ) -> Result<(), E> {
        if self.row_bytes == 0 {
            return Ok(());
        }
        let per_chunk = (CHUNK / self.row_bytes as u64).max(1);
        let mut buffer = Vec::new();
        let mut first = 0;
        while first < self.rows {
            let count = per_chunk.min(self.rows - first);
            buffer.resize(count as usize * self.row_bytes, 0);
            file.read_at(self.start + first * self.row_bytes as u64, &mut buffer)?;
            for (row, bytes) in buffer.chunks_exact(self.row_bytes).enumerate() {
                visit(first + row as u64, bytes)?;
            }
            first += count;
        }
        Ok(())
    }
}

/// Kind, repeat and width in bytes of a TFORM.
fn parse_form(form: &str) -> Option<(ColumnKind, usize, usize)> {
    let form = form.trim();
    let digits = form.bytes().take_while(u8::is_ascii_digit).count();
    let repeat: usize = if digits == 0 { 1 } else { form[..digits].parse().ok()? };
    let (kind, size) = match *form.as_bytes().get(digits)? {
        b'L' => (ColumnKind::Logical, 1),
        b'X' => return Some((ColumnKind::Bits, repeat, repeat.div_ceil(8))),
        b'A' => (ColumnKind::Text, 1),
        b'B' => (ColumnKind::Number(NumberKind::U8), 1),
        b'I' => (ColumnKind::Number(NumberKind::I16), 2),
        b'J' => (ColumnKind::Number(NumberKind::I32), 4),
        b'K' => (ColumnKind::Number(NumberKind::I64), 8),
        b'E' => (ColumnKind::Number(NumberKind::F32), 4),
        b'D' => (ColumnKind::Number(NumberKind::F64), 8),
        b'C' => (ColumnKind::Complex(NumberKind::F32), 8),
        b'M' => (ColumnKind::Complex(NumberKind::F64), 16),
        b'P' => (ColumnKind::Pointer, 8),
        b'Q' => (ColumnKind::Pointer, 16),
        _ => return None,
    };
    Some((kind, repeat, repeat.checked_mul(size)?))
}

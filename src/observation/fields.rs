//! The scalars of a visibility row: sums of scaled numbers at known places.

use crate::fits::{Column, ColumnKind, Groups, NumberKind};

/// A physical quantity of a row: constant + Σ stored · scale over its fields.
///
/// Random-group parameters that share a name are added (FITS Standard 4.0, §6.2), and so are DATE and TIME of FITS-IDI.
/// All constants are summed beforehand, the reference epoch of a date among them, so that a Julian Date split over two
/// parameters loses nothing.
#[derive(Debug, Clone)]
pub(super) struct Quantity {
    constant: f64,
    fields: Vec<(usize, NumberKind, f64)>,
}

impl Quantity {
    /// All parameters whose name, before any dash, is `name`.
    pub fn of_groups(groups: &Groups, name: &str) -> Option<Quantity> {
        let size = groups.number.size();
        let mut quantity = Quantity { constant: 0.0, fields: Vec::new() };
        for (n, parameter) in groups.parameters.iter().enumerate() {
            if stem(&parameter.name) == name {
                quantity.constant += parameter.zero;
                quantity.fields.push((n * size, groups.number, parameter.scale));
            }
        }
        (!quantity.fields.is_empty()).then_some(quantity)
    }

    /// A table column of numbers; its first element counts.
    pub fn of_column(column: &Column) -> Option<Quantity> {
        match column.kind {
            ColumnKind::Number(kind) if column.repeat > 0 => {
                Some(Quantity { constant: column.zero, fields: vec![(column.offset, kind, column.scale)] })
            }
            _ => None,
        }
    }

    /// Adds another quantity.
    pub fn plus(mut self, other: Quantity) -> Quantity {
        self.constant += other.constant;
        self.fields.extend(other.fields);
        self
    }

    /// Adds a constant.
    pub fn shifted(mut self, by: f64) -> Quantity {
        self.constant += by;
        self
    }

    /// Multiplies it all.
    pub fn scaled(mut self, by: f64) -> Quantity {
        self.constant *= by;
        self.fields.iter_mut().for_each(|(_, _, scale)| *scale *= by);
        self
    }

    /// Its values in rows of equal length, all at once; false, and `out` is to be thrown away, where it is not of single-precision
    /// numbers in every row.
    pub fn column(&self, rows: &[u8], row_bytes: usize, out: &mut Vec<f64>) -> bool {
        out.clear();
        out.resize(rows.len() / row_bytes.max(1), self.constant);
        for &(offset, kind, scale) in &self.fields {
            if kind != NumberKind::F32 || offset + 4 > row_bytes {
                return false;
            }
            for (sum, row) in out.iter_mut().zip(rows.chunks_exact(row_bytes)) {
                let bytes = [row[offset], row[offset + 1], row[offset + 2], row[offset + 3]];
                *sum += scale * f64::from(f32::from_be_bytes(bytes));
            }
        }
        true
    }

    /// Its value in a row.
    #[inline]
    pub fn value(&self, row: &[u8]) -> f64 {
        self.fields.iter().fold(self.constant, |sum, (offset, kind, scale)| {
            sum + scale * row.get(*offset..).map_or(f64::NAN, |bytes| kind.get(bytes))
        })
    }
}

/// What precedes the dashes of a name: `UU`, `UU--`, `UU---SIN` and `UU-L-SIN` are all `UU`.
pub(super) fn stem(name: &str) -> String {
    name.split('-').next().unwrap_or("").trim().to_ascii_uppercase()
}

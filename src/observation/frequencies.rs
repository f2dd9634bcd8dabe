//! Channel frequencies: the FREQ axis and the frequency table (FQ, or FREQUENCY in FITS-IDI).

use super::ObservationError;
use super::matrix::Complaint;
use crate::fits::{FitsFile, Hdu, Table};

/// One band (IF) of one frequency set-up.
#[derive(Debug, Clone, Copy, PartialEq)]
pub(super) struct Band {
    pub offset_hz: f64,
    /// Channel spacing as stated, either sign.
    pub width_hz: f64,
    /// Whether frequency falls with channel number.
    pub lower: bool,
}

/// One row of the table.
#[derive(Debug, Clone)]
pub(super) struct SetUp {
    pub id: i64,
    pub bands: Vec<Band>,
}

/// Reads the table; every row must describe `bands` bands.
pub(super) fn read_set_ups(file: &FitsFile, hdu: &Hdu, bands: usize) -> Result<Vec<SetUp>, ObservationError> {
    let path = file.path();
    let at = |problem: crate::fits::FitsProblem| problem.at(path);
    let table = Table::new(hdu).map_err(at)?;
    let id = table.numbers(&["FRQSEL", "FREQID"], 1).map_err(at)?;
    let offset = table.numbers(&["IF FREQ", "BANDFREQ"], bands).map_err(at)?;
    let width = table.numbers(&["CH WIDTH"], bands).map_err(at)?;
    let sideband = table.find(&["SIDEBAND"]);
    let mut set_ups = Vec::new();
    table.for_each_row(file, |_, row| {
        let bands = (0..bands).map(|band| Band {
            offset_hz: offset.number(row, band).unwrap_or(f64::NAN),
            width_hz: width.number(row, band).unwrap_or(f64::NAN),
            lower: sideband.and_then(|c| c.number(row, band)).is_some_and(|s| s < 0.0),
        });
        set_ups.push(SetUp { id: id.number(row, 0).unwrap_or(f64::NAN) as i64, bands: bands.collect() });
        Ok::<(), ObservationError>(())
    })?;
    Ok(set_ups)
}

/// The FREQ axis.
#[derive(Debug, Clone, Copy, PartialEq)]
pub(super) struct Reference {
    pub hz: f64,
    pub pixel: f64,
    pub step_hz: f64,
}

/// Centres and widths of all channels in file order; `shift_hz` is added to each band (FREQOFF of the source).
pub(super) fn channels(
    reference: Reference,
    bands: &[Band],
    per_band: usize,
    shift_hz: &[f64],
) -> Result<(Vec<f64>, Vec<f64>), Complaint> {
    let (mut centres, mut widths) = (Vec::new(), Vec::new());
    for (number, band) in bands.iter().enumerate() {
        // The table holds f32, the axis f64: where they mean the same the axis is nearer.
        let mut step = band.width_hz.abs();
        if (step - reference.step_hz.abs()).abs() <= 1e-6 * step {
            step = reference.step_hz.abs();
        }
        let signed = if band.lower || band.width_hz < 0.0 { -step } else { step };
        let shift = shift_hz.get(number).copied().filter(|s| s.is_finite()).unwrap_or(0.0);
        for channel in 0..per_band {
            let hz = reference.hz + band.offset_hz + shift + (channel as f64 + 1.0 - reference.pixel) * signed;
            if !(hz.is_finite() && hz > 0.0) {
                let problem = format!("channel {} of band {} lies at {hz} Hz", channel + 1, number + 1);
                return Err((problem, "a frequency above 0".to_string()));
            }
            if !(step.is_finite() && step > 0.0) {
                let problem = format!("the channels of band {} are {} Hz wide", number + 1, band.width_hz);
                return Err((problem, "a width that is not 0".to_string()));
            }
            centres.push(hz);
            widths.push(step);
        }
    }
    Ok((centres, widths))
}

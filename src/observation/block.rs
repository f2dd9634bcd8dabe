//! A run of visibility rows, in memory.

use num_complex::Complex32;

/// Rows of visibilities. Arrays over (row, channel, hand) are row-major with the hand fastest.
#[derive(Debug, Clone, Default)]
pub struct Block {
    /// Time of each row: Modified Julian Date, UTC, at mid-integration.
    pub mjd_utc: Vec<f64>,
    /// u, v, w of each row in metres, baseline r_q − r_p, in the frame of the phase centre.
    pub uvw_m: Vec<[f64; 3]>,
    /// Station p of each row (index).
    pub first: Vec<u32>,
    /// Station q of each row (index).
    pub second: Vec<u32>,
    /// Number of channels.
    pub channels: usize,
    /// Number of hands.
    pub hands: usize,
    /// Visibilities in Jy, `[row][channel][hand]`.
    pub data: Vec<Complex32>,
    /// Weights 1/σ² in Jy⁻², `[row][channel][hand]`; 0 where the visibility is not used. Always finite, never
    /// negative; `data` is finite wherever the weight is positive.
    pub weight: Vec<f32>,
}

impl Block {
    /// Number of rows.
    pub fn rows(&self) -> usize {
        self.mjd_utc.len()
    }

    /// Position of (row, channel, hand 0) in `data` and `weight`.
    pub fn index(&self, row: usize, channel: usize) -> usize {
        (row * self.channels + channel) * self.hands
    }

    /// Empties the block, for rows of `channels` and `hands`, and keeps its memory.
    pub(super) fn clear(&mut self, channels: usize, hands: usize) {
        self.mjd_utc.clear();
        self.uvw_m.clear();
        self.first.clear();
        self.second.clear();
        self.data.clear();
        self.weight.clear();
        (self.channels, self.hands) = (channels, hands);
    }

    /// Moves the rows of `other` to the end of this block; both have the same channels and hands.
    pub(super) fn append(&mut self, other: &mut Block) {
        self.mjd_utc.append(&mut other.mjd_utc);
        self.uvw_m.append(&mut other.uvw_m);
        self.first.append(&mut other.first);
        self.second.append(&mut other.second);
        self.data.append(&mut other.data);
        self.weight.append(&mut other.weight);
    }
}

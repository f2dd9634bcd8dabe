//! Correlation products.

use serde::Serialize;

/// One correlation product of a visibility: a pair of feeds or a Stokes parameter.
#[derive(Debug, Clone, Copy, PartialEq, Eq, Hash, Serialize)]
#[allow(missing_docs)]
pub enum Hand {
    I,
    Q,
    U,
    V,
    RR,
    LL,
    RL,
    LR,
    XX,
    YY,
    XY,
    YX,
}

impl Hand {
    const CODES: [(i64, Hand); 12] = [
        (1, Hand::I),
        (2, Hand::Q),
        (3, Hand::U),
        (4, Hand::V),
        (-1, Hand::RR),
        (-2, Hand::LL),
        (-3, Hand::RL),
        (-4, Hand::LR),
        (-5, Hand::XX),
        (-6, Hand::YY),
        (-7, Hand::XY),
        (-8, Hand::YX),
    ];

    /// The hand of a FITS Stokes axis value (FITS Standard 4.0, §8.5).
    pub fn from_code(code: i64) -> Option<Hand> {
        Self::CODES.iter().find(|(c, _)| *c == code).map(|(_, hand)| *hand)
    }

    /// The FITS Stokes axis value.
    pub fn code(self) -> i64 {
        Self::CODES.iter().find(|(_, hand)| *hand == self).map_or(0, |(c, _)| *c)
    }

    /// Name as written by people.
    pub fn name(self) -> &'static str {
        match self {
            Hand::I => "I",
            Hand::Q => "Q",
            Hand::U => "U",
            Hand::V => "V",
            Hand::RR => "RR",
            Hand::LL => "LL",
            Hand::RL => "RL",
            Hand::LR => "LR",
            Hand::XX => "XX",
            Hand::YY => "YY",
            Hand::XY => "XY",
            Hand::YX => "YX",
        }
    }

    /// The hand of a name that [`Hand::name`] gives.
    pub fn from_name(name: &str) -> Option<Hand> {
        Self::CODES.iter().map(|(_, hand)| *hand).find(|hand| hand.name() == name)
    }

    /// The feed (0 for X or R, 1 for Y or L) whose pattern a parallel hand sees at both stations.
    pub fn parallel_feed(self) -> Option<usize> {
        match self {
            Hand::RR | Hand::XX => Some(0),
            Hand::LL | Hand::YY => Some(1),
            _ => None,
        }
    }

    /// Whether this product measures Stokes I by itself or as one of two parallel hands.
    pub fn carries_total_intensity(self) -> bool {
        self == Hand::I || self.parallel_feed().is_some()
    }
}

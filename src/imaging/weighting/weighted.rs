//! Visibilities with other weights than those of their file.

use super::Weigher;
use crate::observation::{Block, BlockSource, Observation, ObservationError};

/// The visibilities of a pointing, with imaging weights where there are any.
pub struct Weighted {
    inner: Box<dyn BlockSource>,
    weigher: Option<Weigher>,
    scale: f32,
}

impl Weighted {
    /// With the weights of the source, times `scale`. Reading fails where a weight leaves single precision by it.
    pub fn new(inner: Box<dyn BlockSource>, scale: f64) -> Weighted {
        Weighted { inner, weigher: None, scale: scale as f32 }
    }

    /// Takes imaging weights, or gives them up for inverse variances again; tells those it had.
    pub fn weigh_by(&mut self, weigher: Option<Weigher>) -> Option<Weigher> {
        std::mem::replace(&mut self.weigher, weigher)
    }

    pub(in crate::imaging) fn weigher(&self) -> Option<&Weigher> {
        self.weigher.as_ref()
    }

    /// A weight that becomes infinite would spoil every sum, one that becomes 0 would drop its visibility unsaid.
    fn scaled(&self, block: &mut Block) -> Result<(), ObservationError> {
        for weight in block.weight.iter_mut().filter(|weight| **weight > 0.0) {
            let scaled = *weight * self.scale;
            if !scaled.is_normal() {
                return Err(ObservationError::Content {
                    path: self.inner.observation().origin.clone().into(),
                    problem: format!("a weight of {weight:e} times weight_scale {:e} is {scaled:e}", self.scale),
                    expected: format!(
                        "scaled weights from {:e} to {:e} Jy⁻², the range of single precision: take another weight_scale \
                         for this file",
                        f32::MIN_POSITIVE,
                        f32::MAX
                    ),
                });
            }
            *weight = scaled;
        }
        Ok(())
    }
}

impl AsMut<dyn BlockSource> for Weighted {
    fn as_mut(&mut self) -> &mut (dyn BlockSource + 'static) {
        self
    }
}

impl BlockSource for Weighted {
    fn observation(&self) -> &Observation {
        self.inner.observation()
    }

    fn rewind(&mut self) -> Result<(), ObservationError> {
        self.inner.rewind()
    }

    fn next_block(&mut self) -> Result<Option<Block>, ObservationError> {
        let Some(mut block) = self.inner.next_block()? else { return Ok(None) };
        if self.scale != 1.0 {
            self.scaled(&mut block)?;
        }
        if let Some(weigher) = &self.weigher {
            weigher.apply(&mut block);
        }
        Ok(Some(block))
    }
}

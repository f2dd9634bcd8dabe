//! Block sources seen by someone else on the way: to count, to thin out, to replace the data.

use super::{Block, BlockSource, Observation, ObservationError};

/// A block source whose blocks pass through a function that may look at them or change them.
pub struct Watched<'a, F> {
    inner: &'a mut dyn BlockSource,
    each: F,
}

impl<'a, F: FnMut(&mut Block) -> Result<(), ObservationError> + Send> Watched<'a, F> {
    /// Calls `each` with every block that `inner` hands out.
    pub fn new(inner: &'a mut dyn BlockSource, each: F) -> Self {
        Watched { inner, each }
    }
}

impl<F: FnMut(&mut Block) -> Result<(), ObservationError> + Send> BlockSource for Watched<'_, F> {
    fn observation(&self) -> &Observation {
        self.inner.observation()
    }

    fn rewind(&mut self) -> Result<(), ObservationError> {
        self.inner.rewind()
    }

    fn next_block(&mut self) -> Result<Option<Block>, ObservationError> {
        match self.inner.next_block()? {
            Some(mut block) => {
                (self.each)(&mut block)?;
                Ok(Some(block))
            }
            None => Ok(None),
        }
    }
}

//! Visibilities held in memory: simulated ones, and files small enough to keep.

use super::{Block, BlockSource, Observation, ObservationError};

/// A block source over blocks in memory.
#[derive(Debug, Clone)]
pub struct MemorySource {
    observation: Observation,
    blocks: Vec<Block>,
    next: usize,
}

impl MemorySource {
    /// Wraps blocks that belong to `observation`.
    pub fn new(observation: Observation, blocks: Vec<Block>) -> Self {
        MemorySource { observation, blocks, next: 0 }
    }

    /// Reads all that another source has.
    ///
    /// # Errors
    /// As the other source.
    pub fn read(source: &mut dyn BlockSource) -> Result<Self, ObservationError> {
        source.rewind()?;
        let mut blocks = Vec::new();
        while let Some(block) = source.next_block()? {
            blocks.push(block);
        }
        Ok(MemorySource::new(source.observation().clone(), blocks))
    }

    /// The blocks.
    pub fn blocks(&self) -> &[Block] {
        &self.blocks
    }

    /// The blocks, to be changed.
    pub fn blocks_mut(&mut self) -> &mut [Block] {
        &mut self.blocks
    }
}

impl BlockSource for MemorySource {
    fn observation(&self) -> &Observation {
        &self.observation
    }

    fn rewind(&mut self) -> Result<(), ObservationError> {
        self.next = 0;
        Ok(())
    }

    fn next_block(&mut self) -> Result<Option<Block>, ObservationError> {
        let block = self.blocks.get(self.next).cloned();
        self.next += 1;
        Ok(block)
    }

    fn lend_block<'a>(&'a mut self, _kept: &'a mut Option<Block>) -> Result<Option<&'a Block>, ObservationError> {
        self.next += 1;
        Ok(self.blocks.get(self.next - 1))
    }
}

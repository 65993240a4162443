//! One growable block of scratch memory that kernels take their temporaries from.
//!
//! It is not a cache: nothing survives from one kernel call to the next.

use faer::dyn_stack::{MemBuffer, MemStack, StackReq};

/// Scratch memory that grows to the largest request seen and is then reused.
pub struct Workspace {
    buffer: MemBuffer,
    held: StackReq,
}

impl Workspace {
    /// Creates an empty workspace; the first request allocates.
    pub fn new() -> Self {
        Self { buffer: MemBuffer::new(StackReq::EMPTY), held: StackReq::EMPTY }
    }

    /// Returns scratch memory of at least the size and alignment of `request`, allocating only when it exceeds all earlier ones.
    ///
    /// Panics when the system cannot provide the memory.
    pub fn stack(&mut self, request: StackReq) -> &mut MemStack {
        let fits = request.size_bytes() <= self.held.size_bytes()
            && request.align_bytes() <= self.held.align_bytes();
        if !fits {
            self.held = self.held.or(request);
            self.buffer = MemBuffer::new(StackReq::EMPTY);
            self.buffer = MemBuffer::new(self.held);
        }
        MemStack::new(&mut self.buffer)
    }

    /// Returns the number of bytes held.
    pub fn bytes(&self) -> usize {
        self.held.size_bytes()
    }
}

impl Default for Workspace {
    fn default() -> Self {
        Self::new()
    }
}

impl std::fmt::Debug for Workspace {
    fn fmt(&self, f: &mut std::fmt::Formatter<'_>) -> std::fmt::Result {
        f.debug_struct("Workspace").field("bytes", &self.bytes()).finish()
    }
}

//! Blocks of lanes: vectors of f64 that begin on a cache line, in large pages where there are any.

use std::ops::{Deref, DerefMut};

/// Numbers in a cache line of 64 bytes: eight lanes of one row of a block.
const LINE: usize = 8;

/// Below this many bytes large pages gain nothing.
const HUGE_MIN: usize = 4 << 20;

/// Numbers that begin on a cache line, so that eight lanes of a row lie in one line, not in two.
#[derive(Debug, Default)]
pub struct Block {
    data: Vec<f64>,
    first: usize,
    length: usize,
}

impl Block {
    /// `length` zeros. The system hands out memory on first touch, which is left to whoever fills
    /// the block.
    pub fn zeros(length: usize) -> Self {
        if length == 0 {
            return Self::default();
        }
        let data: Vec<f64> = zeros(length + LINE - 1);
        let first = data.as_ptr().align_offset(64).min(LINE - 1);
        Self { data, first, length }
    }

    /// Bytes that [`Block::zeros`] allocates.
    pub fn bytes(length: usize) -> u64 {
        if length == 0 { 0 } else { 8 * (length + LINE - 1) as u64 }
    }

    /// Bytes that the block holds, however many of its numbers are still in use.
    pub fn allocated(&self) -> u64 {
        8 * self.data.capacity() as u64
    }

    /// Keeps the first `length` numbers.
    pub fn truncate(&mut self, length: usize) {
        self.length = self.length.min(length);
    }
}

impl Deref for Block {
    type Target = [f64];
    fn deref(&self) -> &[f64] {
        &self.data[self.first..self.first + self.length]
    }
}

impl DerefMut for Block {
    fn deref_mut(&mut self) -> &mut [f64] {
        &mut self.data[self.first..self.first + self.length]
    }
}

/// `length` zeros (the default of `T`) in memory for which large pages are asked; not touched yet
/// where `T`'s default is all zero bits.
pub fn zeros<T: Copy + Default>(length: usize) -> Vec<T> {
    let values = vec![T::default(); length];
    ask_for_large_pages(&values);
    values
}

/// Asks the system to back memory with large pages: fewer misses of the address cache where
/// accesses jump. Nothing is touched, and a system that declines costs nothing.
#[cfg(all(target_os = "linux", not(miri)))]
#[allow(unsafe_code)]
pub fn ask_for_large_pages<T>(values: &[T]) {
    let bytes = std::mem::size_of_val(values);
    if bytes < HUGE_MIN {
        return;
    }
    // SAFETY: asks for a number; no memory is touched.
    let page = usize::try_from(unsafe { libc::sysconf(libc::_SC_PAGESIZE) }).unwrap_or(0);
    if page == 0 {
        return;
    }
    let start = (values.as_ptr() as usize).next_multiple_of(page);
    let end = (values.as_ptr() as usize + bytes) / page * page;
    // SAFETY: the range lies inside memory that `values` borrows, and this advice changes neither
    // what it holds nor who may use it. A refusal is of no consequence.
    unsafe {
        libc::madvise(start as *mut libc::c_void, end - start, libc::MADV_HUGEPAGE);
    }
}

/// Other systems decide by themselves.
#[cfg(not(all(target_os = "linux", not(miri))))]
pub fn ask_for_large_pages<T>(values: &[T]) {
    let _ = (values, HUGE_MIN);
}

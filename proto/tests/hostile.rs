//! Lengths that lie cost no memory: the largest single allocation is watched while hostile bytes are decoded.
//!
//! One test alone in its program, because the watch covers the whole program.

mod common;

use common::samples;
use std::alloc::{GlobalAlloc, Layout, System};
use std::sync::atomic::{AtomicUsize, Ordering};
use trackhold_proto::Envelope;
use trackhold_proto::header::HEADER_BYTES;
use trackhold_proto::journal::{FRAME_HEAD_BYTES, read_frame};

struct Watching;

static LARGEST: AtomicUsize = AtomicUsize::new(0);

#[expect(
    unsafe_code,
    reason = "allocations are counted here; every call goes to the system's allocator unchanged"
)]
// SAFETY: both calls are handed on with the caller's own arguments.
unsafe impl GlobalAlloc for Watching {
    unsafe fn alloc(&self, layout: Layout) -> *mut u8 {
        LARGEST.fetch_max(layout.size(), Ordering::Relaxed);
        unsafe { System.alloc(layout) }
    }
    unsafe fn dealloc(&self, pointer: *mut u8, layout: Layout) {
        unsafe { System.dealloc(pointer, layout) }
    }
}

#[global_allocator]
static ALLOCATOR: Watching = Watching;

/// The largest allocation made in `work`, bytes.
fn largest_in(work: impl FnOnce()) -> usize {
    LARGEST.store(0, Ordering::Relaxed);
    work();
    LARGEST.load(Ordering::Relaxed)
}

/// Calls `see` with `bytes` after writing each of several huge lengths at each place from `from` on.
fn with_lies(bytes: &[u8], from: usize, mut see: impl FnMut(&mut [u8])) {
    for at in from..bytes.len() {
        for lie in [u64::MAX, u64::MAX >> 6, 1 << 40, 1 << 27, 1 << 20, 0xffff] {
            for width in [2, 4, 8] {
                let width = width.min(bytes.len() - at);
                let mut altered = bytes.to_vec();
                altered[at..at + width].copy_from_slice(&lie.to_le_bytes()[..width]);
                see(&mut altered);
            }
        }
    }
}

#[test]
fn a_length_that_lies_allocates_little() {
    // What `with_lies` itself needs is less than this.
    for (name, sample) in samples() {
        let binary = sample.to_vec();
        let taken = largest_in(|| {
            with_lies(&binary, HEADER_BYTES, |altered| drop(Envelope::decode(altered)));
        });
        assert!(taken <= 1200, "{name}: {taken} bytes at once");
        let json = sample.to_json();
        let taken = largest_in(|| {
            with_lies(json.as_bytes(), 1, |altered| drop(Envelope::decode(altered)));
        });
        assert!(taken <= 8192, "{name} in JSON: {taken} bytes at once");
    }
    for body in common::bodies::bodies() {
        let name = body.name();
        let frame = common::bodies::frame_of(1, body);
        let taken = largest_in(|| {
            with_lies(&frame, FRAME_HEAD_BYTES, |altered| {
                seal(altered);
                drop(read_frame(altered));
            });
            // A lie in the head itself, with no more bytes behind it.
            with_lies(&frame[..FRAME_HEAD_BYTES], 0, |altered| drop(read_frame(altered)));
        });
        assert!(taken <= 512 << 10, "{name}: {taken} bytes at once");
    }
}

/// Puts the right CRC in: whoever lies can compute it too.
fn seal(frame: &mut [u8]) {
    let sum = crc::Crc::<u32, crc::Table<1>>::new(&crc::CRC_32_ISCSI);
    let mut digest = sum.digest();
    digest.update(&frame[..20]);
    digest.update(&frame[FRAME_HEAD_BYTES..]);
    let value = digest.finalize().to_le_bytes();
    frame[20..24].copy_from_slice(&value);
}

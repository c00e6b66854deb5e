//! Where a free ring-down begins and ends in a record that may start before the event.

use super::RingRecord;
use std::ops::Range;

/// The samples of the free ring in a bare ring-down. `None` where nothing rings.
pub fn find_ring_down(record: &RingRecord<'_>) -> Option<Range<usize>> {
    Some(0..record.volts.len())
}

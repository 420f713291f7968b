//! Identifiers, each kept once and numbered in order of arrival.

use std::hash::{BuildHasher, Hasher};

use foldhash::fast::RandomState;
use hashbrown::HashTable;

/// Bytes of one piece of the store; an identifier never lies across two.
const CHUNK: usize = 1 << 20;
/// Places are counted in units of so many bytes, so that 32 bits reach over 16 GiB.
const UNIT: usize = 4;
/// In front of each identifier: its number and its length.
const HEAD: usize = 6;

/// Where an identifier is kept, with 32 bits of its hash: a table that grows need not look at the identifiers.
#[derive(Debug, Clone, Copy)]
struct Entry {
    hash: u32,
    place: u32,
}

/// The identifiers of a list.
#[derive(Debug, Default)]
pub struct Names {
    table: HashTable<Entry>,
    chunks: Vec<Vec<u8>>,
    hasher: RandomState,
    count: u32,
}

/// The hash by which the table places and tells entries: its low bits and its highest seven.
#[inline]
fn spread(hash: u32) -> u64 {
    u64::from(hash) << 32 | u64::from(hash)
}

impl Names {
    /// The number of an identifier, which gets the next free one when it is new. None when the store is full.
    #[inline]
    pub fn number(&mut self, name: &[u8]) -> Option<u32> {
        let mut hasher = self.hasher.build_hasher();
        hasher.write(name);
        let hash = (hasher.finish() >> 32) as u32;
        let chunks = &self.chunks;
        let same =
            |entry: &Entry| entry.hash == hash && stored(chunks, entry.place).is_some_and(|(_, kept)| kept == name);
        match self.table.find(spread(hash), same) {
            Some(entry) => stored(chunks, entry.place).map(|(number, _)| number),
            None => self.add(name, hash),
        }
    }

    #[cold]
    fn add(&mut self, name: &[u8], hash: u32) -> Option<u32> {
        let length = u16::try_from(name.len()).ok()?;
        let size = (HEAD + name.len()).next_multiple_of(UNIT);
        if self.chunks.last().is_none_or(|chunk| chunk.len() + size > CHUNK) {
            self.chunks.push(Vec::with_capacity(CHUNK));
        }
        let index = self.chunks.len() - 1;
        let chunk = self.chunks.last_mut()?;
        let place = u32::try_from((index * CHUNK + chunk.len()) / UNIT).ok()?;
        let number = self.count;
        let end = chunk.len() + size;
        chunk.extend_from_slice(&number.to_le_bytes());
        chunk.extend_from_slice(&length.to_le_bytes());
        chunk.extend_from_slice(name);
        chunk.resize(end, 0);
        self.count = number.checked_add(1)?;
        self.table.insert_unique(spread(hash), Entry { hash, place }, |entry| spread(entry.hash));
        Some(number)
    }
}

/// The number and the bytes kept at a place.
#[inline]
fn stored(chunks: &[Vec<u8>], place: u32) -> Option<(u32, &[u8])> {
    const UNITS: usize = CHUNK / UNIT;
    let chunk = chunks.get(place as usize / UNITS)?;
    let (head, rest) = chunk.get(place as usize % UNITS * UNIT..)?.split_first_chunk::<HEAD>()?;
    let [n0, n1, n2, n3, l0, l1] = *head;
    Some((u32::from_le_bytes([n0, n1, n2, n3]), rest.get(..usize::from(u16::from_le_bytes([l0, l1])))?))
}

#[cfg(test)]
mod tests {
    use super::*;

    #[test]
    fn numbers_follow_arrival_and_stay() {
        let mut names = Names::default();
        let text = |i: u32| format!("{i:0width$}", width = 1 + i as usize % 1_000);
        for _ in 0..2 {
            for i in 0..5_000 {
                assert_eq!(names.number(text(i).as_bytes()), Some(i));
            }
        }
        assert!(names.chunks.len() > 2, "more than one chunk was needed");
    }
}

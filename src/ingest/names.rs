//! Identifiers, each kept once and numbered in order of arrival.

use std::hash::{BuildHasher, Hasher};

use foldhash::fast::RandomState;
use hashbrown::HashTable;

/// Bytes of one piece of the store; an identifier never lies across two.
const CHUNK: usize = 1 << 20;
/// Places are counted in units of so many bytes, so that 32 bits reach over 16 GiB.
const UNIT: usize = 4;
/// Bytes that memory hands over at once on common processors.
const CACHE_LINE: usize = 64;
/// In front of each identifier: its number and its length.
const HEAD: usize = 6;

/// Where an identifier is kept, with 32 bits of its hash: a table that grows need not look at the identifiers.
#[derive(Debug, Clone, Copy)]
struct Entry {
    hash: u32,
    place: u32,
}

/// The identifiers of a list.
///
/// A look-up waits for memory twice: for the table and for the bytes. [`Self::candidate`] and [`Self::confirm`] are its
/// two halves, so that many can wait at the same time. With the identifiers of 10⁶ nodes that halves the time
/// of a whole list.
#[derive(Debug, Default)]
pub struct Names {
    table: HashTable<Entry>,
    chunks: Vec<Vec<u8>>,
    hasher: RandomState,
    count: u32,
}

/// The hash of an identifier.
#[inline]
pub fn hash(hasher: &RandomState, name: &[u8]) -> u32 {
    let mut hasher = hasher.build_hasher();
    hasher.write(name);
    (hasher.finish() >> 32) as u32
}

/// The hash by which the table places and tells entries: its low bits and its highest seven.
#[inline]
fn spread(hash: u32) -> u64 {
    u64::from(hash) << 32 | u64::from(hash)
}

impl Names {
    /// What hashes identifiers, for [`hash`].
    pub fn hasher(&self) -> RandomState {
        self.hasher.clone()
    }

    /// Where the identifier with this hash is kept, if any is.
    #[inline]
    pub fn candidate(&self, hash: u32) -> Option<u32> {
        self.table.find(spread(hash), |entry| entry.hash == hash).map(|entry| entry.place)
    }

    /// The number of the identifier kept at a place, if it is `name`.
    #[inline]
    pub fn confirm(&self, place: u32, name: &[u8]) -> Option<u32> {
        let (number, kept) = stored(&self.chunks, place)?;
        same(kept, name).then_some(number)
    }

    /// A byte of what is kept at a place, to have it brought near.
    #[inline]
    pub fn touch(&self, place: u32) -> u8 {
        rest(&self.chunks, place).and_then(|rest| rest.first()).copied().unwrap_or_default()
    }

    /// The number of an identifier, which gets the next free one when it is new. None when the store is full.
    pub fn number(&mut self, name: &[u8], hash: u32) -> Option<u32> {
        let chunks = &self.chunks;
        let same =
            |entry: &Entry| entry.hash == hash && stored(chunks, entry.place).is_some_and(|(_, kept)| kept == name);
        match self.table.find(spread(hash), same) {
            Some(entry) => stored(chunks, entry.place).map(|(number, _)| number),
            None => self.add(name, hash),
        }
    }

    fn add(&mut self, name: &[u8], hash: u32) -> Option<u32> {
        let length = u16::try_from(name.len()).ok()?;
        let size = (HEAD + name.len()).next_multiple_of(UNIT);
        let start = self.chunks.last().map_or(CHUNK, |chunk| within_line(chunk.len(), size));
        if start + size > CHUNK {
            self.chunks.push(Vec::with_capacity(CHUNK));
        }
        let index = self.chunks.len() - 1;
        let chunk = self.chunks.last_mut()?;
        chunk.resize(within_line(chunk.len(), size), 0);
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

/// Where something of `size` begins that would begin at `start`, so that it does not lie across two lines of the cache.
fn within_line(start: usize, size: usize) -> usize {
    let across = start / CACHE_LINE != (start + size - 1) / CACHE_LINE;
    if across && size <= CACHE_LINE { start.next_multiple_of(CACHE_LINE) } else { start }
}

/// Whether two identifiers are the same; those of usual length without a call.
#[inline]
fn same(one: &[u8], other: &[u8]) -> bool {
    const WORD: usize = 8;
    let ends = |text: &[u8]| Some((*text.first_chunk::<WORD>()?, *text.last_chunk::<WORD>()?));
    match (ends(one), ends(other)) {
        (Some(one_ends), Some(other_ends)) if one.len() <= 2 * WORD => {
            one.len() == other.len() && one_ends == other_ends
        }
        _ => one == other,
    }
}

/// What is kept from a place on.
#[inline]
fn rest(chunks: &[Vec<u8>], place: u32) -> Option<&[u8]> {
    const UNITS: usize = CHUNK / UNIT;
    chunks.get(place as usize / UNITS)?.get(place as usize % UNITS * UNIT..)
}

/// The number and the bytes kept at a place.
#[inline]
fn stored(chunks: &[Vec<u8>], place: u32) -> Option<(u32, &[u8])> {
    let (head, rest) = rest(chunks, place)?.split_first_chunk::<HEAD>()?;
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
        for round in 0..2 {
            for i in 0..5_000 {
                let text = text(i);
                let hash = hash(&names.hasher, text.as_bytes());
                let found = names.candidate(hash).and_then(|place| names.confirm(place, text.as_bytes()));
                assert_eq!(found, (round == 1).then_some(i));
                assert_eq!(names.number(text.as_bytes(), hash), Some(i));
            }
        }
        assert!(names.chunks.len() > 2, "more than one chunk was needed");
    }

    #[test]
    fn identifiers_are_told_apart_by_every_byte() {
        for length in 1..40 {
            let one = vec![b'a'; length];
            assert!(same(&one, &one) && !same(&one, &vec![b'a'; length + 1]) && !same(&vec![b'a'; length + 1], &one));
            for place in 0..length {
                let mut other = one.clone();
                other[place] = b'b';
                assert!(!same(&one, &other));
            }
        }
    }
}

//! How bytes are grouped on the way changes nothing.
#![allow(clippy::unwrap_used, clippy::expect_used, clippy::panic)]

mod specimens;
mod streams;
mod tables;

use legwise_protocol::decoder::{DecoderCounts, DeviceDecoder, RequestDecoder};
use proptest::prelude::*;
use proptest::test_runner::RngSeed;
use streams::{Damage, Model, Reader};

/// Frames and counts after feeding `stream` cut at `cuts`.
fn read_in_pieces<R: Reader>(stream: &[u8], cuts: &[usize]) -> (Vec<R::Item>, DecoderCounts) {
    let mut reader = R::default();
    let mut items = Vec::new();
    let mut start = 0;
    for &end in cuts.iter().chain([&stream.len()]) {
        reader.take(&stream[start..end], |item| items.push(item));
        start = end;
    }
    (items, reader.seen())
}

fn grouping_changes_nothing<R: Reader>(
    seed: u64,
    strings: usize,
    places: &[f64],
) -> Result<(), TestCaseError> {
    let sent = R::sent(7);
    let mut damage = Damage::new(&sent, R::LONGEST, seed);
    let (mut stream, mut string) = (Vec::new(), Vec::new());
    for _ in 0..strings {
        damage.next(&mut string);
        stream.extend_from_slice(&string);
    }
    let mut cuts: Vec<usize> = places.iter().map(|place| (place * stream.len() as f64) as usize).collect();
    cuts.sort_unstable();

    let mut model = Model::new(&sent, R::LONGEST);
    let mut expected = Vec::new();
    model.take(&stream, &mut expected);
    let expected: Vec<R::Item> = expected.into_iter().map(|index| sent[index].0.clone()).collect();

    let whole = read_in_pieces::<R>(&stream, &[]);
    prop_assert_eq!(&whole, &(expected, model.counts().0));
    prop_assert_eq!(&read_in_pieces::<R>(&stream, &cuts), &whole);
    let every_byte: Vec<usize> = (0..stream.len()).collect();
    prop_assert_eq!(&read_in_pieces::<R>(&stream, &every_byte), &whole);
    Ok(())
}

proptest! {
    #![proptest_config(ProptestConfig { failure_persistence: None, rng_seed: RngSeed::Fixed(1), ..ProptestConfig::with_cases(512) })]

    #[test]
    fn grouping_of_device_bytes_changes_neither_frames_nor_counts(
        seed: u64, strings in 1_usize..24, places in prop::collection::vec(0.0..1.0_f64, 0..40),
    ) {
        grouping_changes_nothing::<DeviceDecoder>(seed, strings, &places)?;
    }

    #[test]
    fn grouping_of_host_bytes_changes_neither_requests_nor_counts(
        seed: u64, strings in 1_usize..24, places in prop::collection::vec(0.0..1.0_f64, 0..40),
    ) {
        grouping_changes_nothing::<RequestDecoder>(seed, strings, &places)?;
    }
}

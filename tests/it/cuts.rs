//! Every reader on the corpus' exports, cut at every byte and spoilt: never a wrong reading, at worst a held row or file.

use revisant_schema::plan::LastLine;
use revisant_tests::chance::Chance;
use revisant_tests::reading::{read_through, spoil, studies};

/// How many exports of each instrument are cut, and up to how many bytes at every one of them.
const EXPORTS: usize = 2;
const EVERY_BYTE: usize = 2500;

#[test]
fn an_export_cut_at_any_byte_gives_no_row_that_the_whole_does_not_have() {
    let mut cuts = 0;
    for study in studies() {
        for (instrument, samples) in study.smallest(EXPORTS) {
            if instrument.reader.last_line == LastLine::Whole {
                continue;
            }
            for sample in samples {
                let Ok(whole) = read_through(instrument, &sample.bytes) else { continue };
                let step = sample.bytes.len() / EVERY_BYTE + 1;
                for end in (0..sample.bytes.len()).step_by(step) {
                    cuts += 1;
                    let Ok(cut) = read_through(instrument, &sample.bytes[..end].to_vec()) else { continue };
                    for (at, cells) in cut {
                        assert_eq!(Some(&cells), whole.get(&at), "{} cut at byte {end}, {at:?}", sample.name);
                    }
                }
            }
        }
    }
    assert!(cuts > 10_000, "only {cuts} cuts were tried");
}

/// Reads exports spoilt in so many ways each. What comes of it does not matter; that each is read to an end, that every
/// line is counted and that nothing panics does.
fn read_spoilt(seed: u64, ways: usize) {
    let mut chance = Chance::new(seed);
    for study in studies() {
        for (instrument, samples) in study.smallest(EXPORTS) {
            for sample in samples {
                for _ in 0..ways {
                    let _ = read_through(instrument, &spoil(&sample.bytes, &mut chance));
                }
            }
        }
    }
}

#[test]
fn spoilt_exports_are_read_to_an_end() {
    read_spoilt(20_261_201, 150);
}

#[test]
#[ignore = "takes minutes"]
fn spoilt_exports_are_read_to_an_end_for_minutes() {
    read_spoilt(7, 4_000);
}

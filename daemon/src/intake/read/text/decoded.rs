//! Text as one stream, for formats whose documents are not made of lines.
//!
//! Invariants: what is handed out is exactly what the bytes say in the stated encoding; a byte that says nothing is a
//! fault, raised once all the text before it has been handed out.

use std::io::{self, Read};

use encoding_rs::{Decoder, DecoderResult, UTF_8};
use revisant_schema::plan::Encoding;

use super::{Bytes, CHUNK, Coding, FileFault, read_some, settle};

/// An export's text, part by part.
pub struct Decoded<'a> {
    stream: Box<dyn Read + 'a>,
    coding: Coding,
    decoder: Decoder,
    name: &'static str,
    buffer: Vec<u8>,
    /// Bytes of the byte-order mark.
    mark: u64,
    /// Bytes read so far.
    read: u64,
    drained: bool,
    fault: Option<String>,
}

impl<'a> Decoded<'a> {
    /// Settles the encoding and stands before the first character, behind a byte-order mark.
    pub fn open(encoding: Encoding, bytes: &'a dyn Bytes) -> Result<Self, FileFault> {
        let settled = settle(encoding, bytes)?;
        if let Some(unsettled) = settled.unsettled {
            return Err(FileFault::Unreadable(unsettled.what));
        }
        let encoding = match settled.coding {
            Coding::Utf16(encoding) | Coding::Other(encoding) => encoding,
            Coding::Utf8 | Coding::Ascii => UTF_8,
        };
        let mut stream = bytes.open()?;
        let mark = settled.mark as u64;
        io::copy(&mut stream.by_ref().take(mark), &mut io::sink())?;
        Ok(Self {
            stream,
            coding: settled.coding,
            decoder: encoding.new_decoder_without_bom_handling(),
            name: encoding.name(),
            buffer: vec![0; CHUNK],
            mark,
            read: mark,
            drained: false,
            fault: None,
        })
    }

    /// The offset of the first character's first byte: the length of the byte-order mark.
    pub fn start(&self) -> u64 {
        self.mark
    }

    /// How many bytes a text takes in the export.
    pub fn bytes_of(&self, text: &str) -> u64 {
        self.coding.bytes_of(text)
    }

    /// Adds the next part, at least one character; `false` at the end.
    pub fn more(&mut self, into: &mut String) -> Result<bool, FileFault> {
        let before = into.len();
        while into.len() == before {
            if let Some(what) = &self.fault {
                return Err(FileFault::Unreadable(what.clone()));
            }
            if self.drained {
                return Ok(false);
            }
            let count = read_some(&mut self.stream, &mut self.buffer)?;
            self.drained = count == 0;
            self.decode(count, into);
        }
        Ok(true)
    }

    fn decode(&mut self, count: usize, into: &mut String) {
        let bytes = &self.buffer[..count];
        let room = self.decoder.max_utf8_buffer_length_without_replacement(count);
        into.reserve(room.unwrap_or(count * 3 + 16));
        let (outcome, read) = self.decoder.decode_to_string_without_replacement(bytes, into, self.drained);
        let passed = match outcome {
            DecoderResult::InputEmpty => {
                self.read += count as u64;
                return;
            }
            DecoderResult::Malformed(length, passed) => u64::from(length) + u64::from(passed),
            // Cannot happen with the room reserved above; a fault is the safe reading.
            DecoderResult::OutputFull => 0,
        };
        let offset = (self.read + read as u64).saturating_sub(passed);
        self.fault = Some(format!("the byte at offset {offset} is not {}", self.name));
    }
}

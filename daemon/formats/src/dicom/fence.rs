//! Looks at a DICOM file's skeleton before anything parses it: nesting, counts and every declared length against what
//! is there. The library that parses afterwards recurses without a limit and believes lengths (a 115 KB file can end
//! the process), and neither can be caught once it happens.

use crate::Error;

const LARGEST: usize = 32 << 20;
const DEEPEST: usize = 12;
const MOST_ELEMENTS: usize = 200_000;
const UNDEFINED: u32 = u32::MAX;

const EXPLICIT: &str = "1.2.840.10008.1.2.1";
const IMPLICIT: &str = "1.2.840.10008.1.2";

/// Whether the bytes carry the DICOM mark.
pub(crate) fn looks_like(bytes: &[u8]) -> bool {
    bytes.get(128..132) == Some(b"DICM")
}

/// Passes a file that can be parsed within bounds.
///
/// # Errors
/// `NotYet` where a length reaches beyond the file's end, `Hold` for what will never be read.
pub(super) fn pass(bytes: &[u8]) -> Result<(), Error> {
    if bytes.len() > LARGEST {
        return Err(hold("it is larger than 32 MiB"));
    }
    let mut walk = Walk { bytes, at: 132, explicit: true, elements: 0 };
    let syntax = walk.meta()?;
    walk.explicit = match syntax.as_str() {
        EXPLICIT => true,
        IMPLICIT => false,
        _ => {
            return Err(hold("its transfer syntax is neither explicit nor implicit little endian"));
        }
    };
    walk.dataset()
}

fn hold(why: &str) -> Error {
    Error::Hold(format!("cannot read the DICOM file: {why}"))
}

struct Walk<'b> {
    bytes: &'b [u8],
    at: usize,
    explicit: bool,
    elements: usize,
}

/// A sequence or an item that is being walked: where it ends, or that a delimiter will end it.
#[derive(Clone, Copy)]
struct Open {
    end: Option<usize>,
}

impl Walk<'_> {
    fn u16(&mut self) -> Result<u16, Error> {
        let two = self.bytes.get(self.at..self.at + 2).and_then(|two| two.try_into().ok());
        self.at += 2;
        two.map(u16::from_le_bytes).ok_or_else(short)
    }

    fn u32(&mut self) -> Result<u32, Error> {
        Ok(u32::from(self.u16()?) | u32::from(self.u16()?) << 16)
    }

    /// Tag and length of the element at hand; whether its VR says that it is a sequence.
    fn head(&mut self) -> Result<((u16, u16), u32, bool), Error> {
        self.elements += 1;
        if self.elements > MOST_ELEMENTS {
            return Err(hold("it has more than 200,000 elements"));
        }
        let tag = (self.u16()?, self.u16()?);
        if tag.0 == 0xfffe || !self.explicit {
            return Ok((tag, self.u32()?, false));
        }
        let vr = self.u16()?.to_le_bytes();
        if !vr.iter().all(u8::is_ascii_uppercase) {
            return Err(hold("an element has no valid type"));
        }
        let long = [
            b"OB", b"OD", b"OF", b"OL", b"OV", b"OW", b"SQ", b"SV", b"UC", b"UN", b"UR", b"UT",
            b"UV",
        ];
        let length = if long.contains(&&vr) {
            self.at += 2;
            self.u32()?
        } else {
            u32::from(self.u16()?)
        };
        Ok((tag, length, &vr == b"SQ"))
    }

    /// The file meta group: its transfer syntax.
    fn meta(&mut self) -> Result<String, Error> {
        let mut syntax = None;
        while self.bytes.get(self.at..self.at + 2) == Some(&[2, 0]) {
            let (tag, length, _) = self.head()?;
            let end = self.end(length, self.bytes.len())?;
            if tag == (0x0002, 0x0010) {
                let text = self.bytes.get(self.at..end).unwrap_or(&[]);
                syntax =
                    Some(String::from_utf8_lossy(text).trim_end_matches(['\0', ' ']).to_owned());
            }
            self.at = end;
        }
        syntax.ok_or_else(|| hold("it does not state its transfer syntax"))
    }

    /// Where a value of this length ends, within its container.
    fn end(&self, length: u32, container: usize) -> Result<usize, Error> {
        let length = usize::try_from(length).map_err(|_| hold("a length is too large"))?;
        let end = self.at.checked_add(length).ok_or_else(|| hold("a length is too large"))?;
        if end <= container {
            return Ok(end);
        }
        // Beyond the file it may still be arriving; beyond its container it is wrong for good.
        Err(if container == self.bytes.len() {
            short()
        } else {
            hold("an element reaches beyond its container")
        })
    }

    fn dataset(&mut self) -> Result<(), Error> {
        let mut open: Vec<Open> = Vec::new();
        loop {
            while open.last().is_some_and(|last| last.end == Some(self.at)) {
                open.pop();
            }
            let container =
                open.iter().rev().find_map(|container| container.end).unwrap_or(self.bytes.len());
            if self.at >= container {
                return if open.is_empty() { Ok(()) } else { Err(short()) };
            }
            let (tag, length, sequence) = self.head()?;
            match tag {
                (0xfffe, 0xe00d | 0xe0dd) => match open.pop() {
                    Some(Open { end: None }) if length == 0 => {}
                    _ => return Err(hold("a sequence ends where none is open")),
                },
                (0xfffe, 0xe000) if open.is_empty() => {
                    return Err(hold("an item stands outside a sequence"));
                }
                (0xfffe, 0xe000) => self.enter(&mut open, length, container)?,
                (0xfffe, _) => return Err(hold("an element has a tag that does not exist")),
                _ if sequence || length == UNDEFINED || self.holds_items(length) => {
                    if self.explicit && !sequence && length == UNDEFINED {
                        return Err(hold("an element that is no sequence has no length"));
                    }
                    self.enter(&mut open, length, container)?;
                }
                _ => self.at = self.end(length, container)?,
            }
        }
    }

    /// Without types, what begins like an item is walked as a sequence: the parser may take it for one.
    fn holds_items(&self, length: u32) -> bool {
        !self.explicit
            && length >= 8
            && self.bytes.get(self.at..self.at + 4) == Some(&[0xfe, 0xff, 0x00, 0xe0])
    }

    fn enter(&self, open: &mut Vec<Open>, length: u32, container: usize) -> Result<(), Error> {
        // A sequence and its item are two levels of this walk.
        if open.len() >= 2 * DEEPEST {
            return Err(hold("it is nested more than 12 deep"));
        }
        let end = if length == UNDEFINED { None } else { Some(self.end(length, container)?) };
        open.push(Open { end });
        Ok(())
    }
}

fn short() -> Error {
    Error::NotYet("the DICOM file ends within an element: it may not be complete".into())
}

#[cfg(test)]
mod tests {
    use super::*;

    fn file(syntax: &str, body: &[u8]) -> Vec<u8> {
        let mut bytes = vec![0; 128];
        bytes.extend(b"DICM");
        bytes.extend([2, 0, 0x10, 0]);
        bytes.extend(b"UI");
        bytes.extend(u16::try_from(syntax.len()).unwrap().to_le_bytes());
        bytes.extend(syntax.as_bytes());
        bytes.extend(body);
        bytes
    }

    fn says(result: Result<(), Error>) -> String {
        result.unwrap_err().to_string()
    }

    #[test]
    fn nesting_that_would_end_the_process_is_turned_away() {
        let sequence = [0x00, 0x54, 0x00, 0x01, b'S', b'Q', 0, 0, 0xff, 0xff, 0xff, 0xff];
        let item = [0xfe, 0xff, 0x00, 0xe0, 0xff, 0xff, 0xff, 0xff];
        let deep: Vec<u8> = [&sequence[..], &item[..]].concat().repeat(5000);
        assert!(says(pass(&file(EXPLICIT, &deep))).contains("nested more than 12 deep"));
        let implicit =
            [[0x00, 0x54, 0x00, 0x01, 0xff, 0xff, 0xff, 0xff], item].concat().repeat(5000);
        assert!(says(pass(&file(IMPLICIT, &implicit))).contains("nested more than 12 deep"));
    }

    #[test]
    fn a_length_beyond_the_file_is_waited_for_and_never_allocated() {
        let huge = [0x00, 0x54, 0x10, 0x10, b'O', b'W', 0, 0, 0xf0, 0xff, 0xff, 0xff, 1, 2];
        assert!(matches!(pass(&file(EXPLICIT, &huge)), Err(Error::NotYet(_))));
    }

    #[test]
    fn other_transfer_syntaxes_are_held() {
        for syntax in ["1.2.840.10008.1.2.2", "1.2.840.10008.1.2.1.99", "1.2.840.10008.1.2.4.50"] {
            assert!(says(pass(&file(syntax, &[]))).contains("transfer syntax"), "{syntax}");
        }
    }
}

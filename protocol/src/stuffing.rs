//! Consistent overhead byte stuffing (Cheshire and Baker, IEEE/ACM Trans. Networking 7(2), 1999).
//!
//! ```text
//!  zero-free run of n bytes, then a zero    ->  n+1, the run            (n < 254)
//!  zero-free run of 254 bytes               ->  0xFF, the run           (no zero implied)
//! ```
//!
//! The usual crates leave a bounds panic in a linked device image; this form has none. It is checked
//! against such a crate and against the published examples.

/// Copies as much of `from` as `to` holds.
pub(crate) fn copy(from: &[u8], to: &mut [u8]) {
    for (slot, &byte) in to.iter_mut().zip(from) {
        *slot = byte;
    }
}

/// Stuffs `body` into the front of `output`, without a delimiter; the bytes used. `None` when
/// `output` is too small. After a full run at the very end no empty one is added.
pub(crate) fn encode(body: &[u8], output: &mut [u8]) -> Option<usize> {
    let mut used = 0;
    let mut rest = body;
    loop {
        let window = rest.get(..254).unwrap_or(rest);
        let run = window.iter().position(|&byte| byte == 0).unwrap_or(window.len());
        let (piece, after) = rest.split_at_checked(run)?;
        *output.get_mut(used)? = run as u8 + 1;
        copy(piece, output.get_mut(used + 1..used + 1 + run)?);
        used += 1 + run;
        rest = match after {
            [] => return Some(used),
            // A full run implies no zero: the one that may follow starts a run of its own.
            _ if run == 254 => after,
            [_, after @ ..] => after,
        };
        if rest.is_empty() && run != 254 {
            // The body ended in a zero: one more, empty run stands for what follows it.
            *output.get_mut(used)? = 1;
            return Some(used + 1);
        }
    }
}

/// Unstuffs `frame` (delimiter removed) in place; the length of the body at its front. `None` when it
/// is not the form of any body. An empty run at the end is accepted, as some encoders add one.
pub(crate) fn decode_in_place(frame: &mut [u8]) -> Option<usize> {
    let (mut from, mut to) = (0, 0);
    let length = frame.len();
    while from < length {
        let code = usize::from(*frame.get(from)?);
        let end = from.checked_add(code)?;
        if code == 0 || end > length {
            return None;
        }
        from += 1;
        while from < end {
            *frame.get_mut(to)? = *frame.get(from)?;
            from += 1;
            to += 1;
        }
        if code < 255 && from < length {
            *frame.get_mut(to)? = 0;
            to += 1;
        }
    }
    Some(to)
}

#[cfg(test)]
mod tests {
    use super::*;

    #[test]
    fn every_short_pattern_of_zeros_and_runs_agrees_with_a_reference_encoder() {
        // Bodies made of runs of 0..=3, 252..=256 and 508..=510 non-zero bytes with zeros between.
        let lengths = [0, 1, 2, 3, 252, 253, 254, 255, 256, 508, 509, 510];
        let mut body = [0_u8; 2048];
        for first in lengths {
            for second in lengths {
                for zeros in 0..=2 {
                    let total = first + zeros + second;
                    body[..total].fill(0);
                    body[..first].fill(7);
                    body[first + zeros..total].fill(9);
                    check(&body[..total]);
                }
            }
        }
    }

    fn check(body: &[u8]) {
        let (mut ours, mut reference) = ([0xAA; 2100], [0xAA; 2100]);
        let used = encode(body, &mut ours).unwrap();
        let expected = cobs::try_encode(body, &mut reference).unwrap();
        assert_eq!(ours[..used], reference[..expected], "{} bytes", body.len());
        assert!(!ours[..used].contains(&0));
        for room in 0..used.min(8) {
            assert_eq!(encode(body, &mut [0; 8][..room]), None);
        }
        assert_eq!(decode_in_place(&mut ours[..used]), Some(body.len()));
        assert_eq!(&ours[..body.len()], body);
    }

    #[test]
    fn what_no_encoder_writes_is_refused() {
        assert_eq!(decode_in_place(&mut [5, 1, 2]), None);
        assert_eq!(decode_in_place(&mut [0]), None);
        assert_eq!(decode_in_place(&mut [1, 0, 1]), None);
        assert_eq!(decode_in_place(&mut []), Some(0));
    }
}

//! Checksums over stored bytes and the place they belong to, so that neither can change unnoticed.

/// CRC-32 (IEEE 802.3) over the numbers that say where the bytes belong, then the bytes.
pub(super) fn checksum(place: &[i64], bytes: &[u8]) -> u32 {
    let mut crc = crc32fast::Hasher::new();
    place.iter().for_each(|number| crc.update(&number.to_le_bytes()));
    crc.update(bytes);
    crc.finalize()
}

/// Appends the checksum.
pub(super) fn seal(place: &[i64], bytes: &mut Vec<u8>) {
    bytes.extend(checksum(place, bytes).to_le_bytes());
}

/// The bytes under a seal, if it is whole.
pub(super) fn unseal<'a>(place: &[i64], sealed: &'a [u8]) -> Option<&'a [u8]> {
    let (bytes, crc) = sealed.split_last_chunk()?;
    (checksum(place, bytes) == u32::from_le_bytes(*crc)).then_some(bytes)
}

/// The checksum of a record: over its place, the subject's length among it, then subject and text.
pub(super) fn record_seal(shelf: i64, subject: &str, number: i64, text: &[u8]) -> u32 {
    let place = [shelf, number, subject.len() as i64];
    checksum(&place, &[subject.as_bytes(), text].concat())
}

#[cfg(test)]
mod tests {
    use super::*;

    #[test]
    fn a_seal_holds_bytes_and_place() {
        // The check value of CRC-32/ISO-HDLC over "123456789" (Koopman's and Williams's tables; from memory).
        assert_eq!(checksum(&[], b"123456789"), 0xcbf4_3926);
        let mut bytes = b"tally".to_vec();
        seal(&[7, 8], &mut bytes);
        assert_eq!(unseal(&[7, 8], &bytes), Some(&b"tally"[..]));
        assert_eq!(unseal(&[7, 9], &bytes), None);
        for bit in 0..8 * bytes.len() {
            let mut bent = bytes.clone();
            bent[bit / 8] ^= 1 << (bit % 8);
            assert_eq!(unseal(&[7, 8], &bent), None);
        }
        assert_eq!(unseal(&[], b"abc"), None);
    }
}

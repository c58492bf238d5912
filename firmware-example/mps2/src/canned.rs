//! Records that come with the image, each with the set-up it is measured with.
//!
//! The files are NumPy's `.npy` (version 1, little-endian `int16`), written by the simulator from
//! the scenes beside them: `cargo board records` makes them again.

use halfpulse::{
    AdcFormat, Coating, GaugeSetup, Hertz, Material, Metres, MetresPerSecond, Probe, SampleClock, Seconds, Span,
    Window, Zero,
};

/// Longest record that the image measures, in samples.
pub const CAPACITY: usize = 4096;

/// A record with its set-up.
#[derive(Debug)]
pub struct Canned {
    /// Name of the record: its file is `records/NAME.npy`.
    pub name: &'static str,
    /// The file as it is.
    pub file: &'static [u8],
    /// What it is measured with.
    pub setup: GaugeSetup,
    /// What its codes stand for.
    pub format: AdcFormat,
    /// When its samples were taken.
    pub clock: SampleClock,
}

impl Canned {
    /// Copies the codes to the front of `codes`, as an acquisition would, and returns the part that
    /// was filled. A longer record is cut; a file that is not `.npy` gives an empty one.
    pub fn copy_codes<'c>(&self, codes: &'c mut [i16; CAPACITY]) -> &'c [i16] {
        let mut filled = 0;
        for (code, &bytes) in codes.iter_mut().zip(self.samples().as_chunks::<2>().0) {
            *code = i16::from_le_bytes(bytes);
            filled += 1;
        }
        codes.get(..filled).unwrap_or(&[])
    }

    /// The file's bytes behind its header: magic (6 bytes), version (2), length of the rest of the
    /// header (2, little-endian), the rest of the header, samples.
    fn samples(&self) -> &'static [u8] {
        match self.file {
            [0x93, b'N', b'U', b'M', b'P', b'Y', 1, _, low, high, rest @ ..] => rest
                .get(usize::from(u16::from_le_bytes([*low, *high]))..)
                .unwrap_or(&[]),
            _ => &[],
        }
    }
}

/// The record that is costliest to read of all that `cargo board worst` has searched; nothing that a technician meets.
pub const COSTLIEST: &str = "costliest";

/// Includes `records/NAME.npy`.
macro_rules! record {
    ($name:literal, $setup:expr, $bits:literal, $first_sample_us:literal) => {
        Canned {
            name: $name,
            file: include_bytes!(concat!("../records/", $name, ".npy")),
            setup: $setup,
            format: AdcFormat::signed($bits),
            clock: SampleClock {
                rate: $setup.sample_rate,
                first_sample: Seconds::from_us($first_sample_us),
            },
        }
    };
}

const STEEL: Material = Material::new(MetresPerSecond::new(5920.0), MetresPerSecond::new(17.0));

pub(crate) const CONTACT: GaugeSetup = GaugeSetup::new(
    Hertz::from_mhz(50.0),
    Probe::contact(Hertz::from_mhz(5.0), 0.6).with_element_diameter(Metres::from_mm(6.0)),
    STEEL,
    Zero::new(Seconds::from_ns(200.0), Seconds::from_ns(1.0)),
    Span::BackWallToBackWall,
    Window {
        from: Seconds::from_us(1.0),
        to: Seconds::from_us(80.0),
    },
);

pub(crate) const PAINTED: GaugeSetup =
    CONTACT.with_coating(Coating::new(MetresPerSecond::new(2300.0), MetresPerSecond::new(115.0)));

const DELAY_LINE: GaugeSetup = GaugeSetup::new(
    Hertz::from_mhz(100.0),
    Probe::delay_line(Hertz::from_mhz(10.0), 0.6).with_element_diameter(Metres::from_mm(6.0)),
    STEEL,
    Zero::new(Seconds::ZERO, Seconds::from_ns(1.0)),
    Span::InterfaceToBackWall,
    Window {
        from: Seconds::from_us(6.0),
        to: Seconds::from_us(40.0),
    },
);

const FROM_TRANSMISSION_PULSE: GaugeSetup = GaugeSetup::new(
    Hertz::from_mhz(50.0),
    Probe::contact(Hertz::from_mhz(2.25), 0.7).with_element_diameter(Metres::from_mm(13.0)),
    Material::new(MetresPerSecond::new(6380.0), MetresPerSecond::new(20.0)),
    Zero::new(Seconds::from_ns(350.0), Seconds::from_ns(2.0)).with_learned_on(Metres::ZERO),
    Span::TransmissionPulseToBackWall,
    Window {
        from: Seconds::from_us(5.0),
        to: Seconds::from_us(80.0),
    },
);

/// The records, in the order in which they are measured.
pub static RECORDS: [Canned; 6] = [
    record!("steel-10-mm", CONTACT, 12, 0.0),
    record!("painted-steel-6-mm", PAINTED, 12, 0.0),
    record!("delay-line-4-mm", DELAY_LINE, 12, 6.0),
    record!("aluminium-60-mm", FROM_TRANSMISSION_PULSE, 12, 0.0),
    record!("not-coupled", CONTACT, 12, 0.0),
    record!("costliest", CONTACT, 12, 0.0),
];

#[cfg(test)]
mod tests {
    use super::*;

    #[test]
    fn every_file_fills_the_record() {
        for record in &RECORDS {
            let mut codes = [0; CAPACITY];
            let codes = record.copy_codes(&mut codes);
            assert_eq!(codes.len(), CAPACITY, "{}", record.name);
            assert!(codes.iter().any(|&code| code != codes[0]), "{} is flat", record.name);
        }
    }

    #[test]
    fn what_is_not_a_file_is_an_empty_record() {
        for file in [&[][..], b"\x93NUMPY\x01\x00\xff\xff", b"RIFF"] {
            let record = Canned {
                file,
                ..record!("not-coupled", CONTACT, 12, 0.0)
            };
            assert!(record.copy_codes(&mut [0; CAPACITY]).is_empty());
        }
    }
}

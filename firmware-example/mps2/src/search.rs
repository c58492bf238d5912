//! What the search for the costliest record (`cargo board worst`) and its image have to agree on.

use crate::canned::{CONTACT, PAINTED};
use halfpulse::{GaugeSetup, Hertz, Metres, Probe, Seconds, Span, Window, Zero};

/// Set-ups that records are searched for: 5 MHz at 50 MS/s in every span.
pub static SETUPS: [GaugeSetup; 4] = [CONTACT, PAINTED, DELAY_LINE, FROM_TRANSMISSION_PULSE];

const FROM_TRANSMISSION_PULSE: GaugeSetup = GaugeSetup::new(
    CONTACT.sample_rate,
    CONTACT.probe,
    CONTACT.material,
    CONTACT.zero,
    Span::TransmissionPulseToBackWall,
    CONTACT.window,
);

const DELAY_LINE: GaugeSetup = GaugeSetup::new(
    CONTACT.sample_rate,
    Probe::delay_line(Hertz::from_mhz(5.0), 0.6).with_element_diameter(Metres::from_mm(6.0)),
    CONTACT.material,
    Zero::new(Seconds::ZERO, Seconds::from_ns(1.0)),
    Span::InterfaceToBackWall,
    Window {
        from: Seconds::from_us(6.0),
        to: Seconds::from_us(80.0),
    },
);

/// Most records in one run of the image.
pub const MOST_RECORDS: usize = 128;

/// Codes before the first record: how many there are, then the number of each one's set-up.
pub const HEADER: usize = 1 + MOST_RECORDS;

//! Times to thickness.

use crate::math;
use crate::path::PathLaw;
use crate::setup::{Coating, GaugeSetup, ProbeKind, Span};
use crate::units::{Metres, MetresPerSecond, Seconds};
use crate::wall::way;

/// A time and its standard uncertainty from the record's noise (and the trigger's jitter; k = 1).
#[derive(Clone, Copy, Debug, PartialEq, Default)]
#[cfg_attr(feature = "defmt", derive(defmt::Format))]
pub struct Timed {
    /// The time.
    pub time: Seconds,
    /// Its standard uncertainty.
    pub standard_uncertainty: Seconds,
}

impl Timed {
    /// A time with its standard uncertainty.
    #[must_use]
    pub const fn new(time: Seconds, standard_uncertainty: Seconds) -> Self {
        Self {
            time,
            standard_uncertainty,
        }
    }
}

/// What the fit of one record's back-wall train gave. Times count from the transmission trigger, and are those of
/// straight ways: see [`way::path_law`] and [`TrainTimes::straightened`].
#[derive(Clone, Copy, Debug, PartialEq)]
pub struct TrainTimes {
    /// Arrival of the first back wall.
    pub first_back_wall: Timed,
    /// Time from one back wall to the next; `None` with a single back wall.
    pub period: Option<Timed>,
    /// Correlation of the errors of first back wall and period, -1 to 1: two echoes of equal quality give
    /// -0.707, a joint fit of more tends to -0.87. 0 without a period.
    pub first_period_correlation: f32,
    /// What errors of its own in each echo's arrival count in the period, [`crate::echo::train::Train::contrast`]: the root of 2 for two
    /// back walls.
    pub period_contrast: f32,
    /// Arrival of the interface echo; `None` if there is none.
    pub interface: Option<Timed>,
}

impl TrainTimes {
    /// A single back wall.
    #[must_use]
    pub const fn single(first_back_wall: Timed) -> Self {
        Self {
            first_back_wall,
            period: None,
            first_period_correlation: 0.0,
            period_contrast: core::f32::consts::SQRT_2,
            interface: None,
        }
    }

    /// The same with a period and the correlation of its error with that of the first back wall.
    #[must_use]
    pub const fn with_period(mut self, period: Timed, correlation: f32) -> Self {
        self.period = Some(period);
        self.first_period_correlation = correlation;
        self
    }

    /// The same with a period from more echoes than two.
    #[must_use]
    pub const fn with_contrast(mut self, contrast: f32) -> Self {
        self.period_contrast = contrast;
        self
    }

    /// The same with an interface echo.
    #[must_use]
    pub const fn with_interface(mut self, interface: Timed) -> Self {
        self.interface = Some(interface);
        self
    }

    /// The same with the jitter of the trigger in the first back wall's uncertainty, where that counts from the trigger; with
    /// an interface echo of the same record, which jitters with it, nothing changes. The period's error stays what it
    /// is, and so does its covariance with the first back wall's.
    #[must_use]
    pub fn with_jitter(mut self, jitter: Seconds) -> Self {
        let noise = self.first_back_wall.standard_uncertainty;
        if self.interface.is_none() && jitter > Seconds::ZERO {
            let both = root_of_squares(noise, jitter);
            self.first_back_wall.standard_uncertainty = both;
            self.first_period_correlation *= noise / both;
        }
        self
    }

    /// The same with the first back wall where it would lie, were its way straight, if it is now where it came. `start` is
    /// the start of the wall that the law counts from: zero offset or interface. The period of a fitted train is
    /// straight already.
    #[must_use]
    pub fn straightened(mut self, law: &PathLaw<'_>, start: Seconds) -> Self {
        if *law != PathLaw::Straight {
            let first = self.first_back_wall;
            let straight = law.straighten((first.time - start).get());
            self.first_back_wall = Timed::new(
                start + Seconds::new(straight),
                first.standard_uncertainty * (1.0 / law.slope(straight)),
            );
        }
        self
    }
}

/// The span that the wall is read by. On a coated part that is back wall to back wall whatever the set-up
/// names: any other span would count the coating as metal.
#[must_use]
pub const fn wall_span(setup: &GaugeSetup) -> Span {
    if setup.coating.is_some() {
        Span::BackWallToBackWall
    } else {
        setup.span
    }
}

/// The round trip 2 d / c through the wall, with its uncertainty from timing alone:
///
/// * transmission pulse to back wall: first back wall - zero offset;
/// * interface to back wall: first back wall - interface - zero offset;
/// * back wall to back wall: the period.
///
/// `None` if what [`wall_span`] needs was not found.
#[must_use]
pub fn round_trip(setup: &GaugeSetup, times: &TrainTimes) -> Option<Timed> {
    let first = times.first_back_wall;
    match wall_span(setup) {
        Span::TransmissionPulseToBackWall => {
            Some(Timed::new(first.time - setup.zero.offset, first.standard_uncertainty))
        }
        Span::InterfaceToBackWall => {
            let interface = times.interface?;
            Some(Timed::new(
                first.time - interface.time - setup.zero.offset,
                root_of_squares(first.standard_uncertainty, interface.standard_uncertainty),
            ))
        }
        Span::BackWallToBackWall => times.period,
    }
}

/// The wall, d = c / 2 times [`round_trip`]; without any coating. `None` if the times do not hold what the
/// span needs. Nothing else is judged: a negative result means a zero that lies behind the echo.
#[must_use]
pub fn wall(setup: &GaugeSetup, times: &TrainTimes) -> Option<Metres> {
    let trip = round_trip(setup, times)?;
    Some(half_path(setup.velocity(), trip.time))
}

/// What is left of the first back wall's arrival when start and wall are taken off: the round trip through the
/// coating, first back wall - start - period, with its uncertainty from timing alone. The start is the zero
/// offset, behind a delay line the interface echo plus the zero offset.
///
/// Without a coating this is the check of the zero: it differs from nothing only by what the beam, the couplant
/// and a wrong zero do. `None` without a period, or without the interface echo of a delay line.
#[must_use]
pub fn excess(setup: &GaugeSetup, times: &TrainTimes) -> Option<Timed> {
    let (first, period) = (times.first_back_wall, times.period?);
    let interface = match setup.probe.kind {
        ProbeKind::DelayLine => times.interface?,
        ProbeKind::Contact | ProbeKind::DualElement => Timed::default(),
    };
    let (u_first, u_period) = (first.standard_uncertainty.get(), period.standard_uncertainty.get());
    let covariance = times.first_period_correlation * u_first * u_period;
    let variance = (u_first - u_period) * (u_first - u_period) + 2.0 * (u_first * u_period - covariance);
    Some(Timed::new(
        first.time - interface.time - setup.zero.offset - period.time,
        root_of_squares(Seconds::new(math::sqrt(variance)), interface.standard_uncertainty),
    ))
}

/// The coating that a round trip stands for, its velocity / 2 times the time, with its standard uncertainty (k = 1).
/// `None` if nobody knows its velocity.
///
/// d = v t / 2, so that u²(d) = (v / 2)² u²(t) + (t / 2)² u²(v) (JCGM 100:2008, 5.1.2): what the velocity is off by, the
/// coating is off by in the same proportion.
#[must_use]
pub fn coating(coating: &Coating, trip: Timed) -> Option<(Metres, Metres)> {
    let velocity = coating.velocity?;
    let by_time = half_path(velocity, trip.standard_uncertainty).get();
    let by_velocity = half_path(coating.velocity_standard_uncertainty, trip.time).get();
    let uncertainty = math::sqrt(by_time * by_time + by_velocity * by_velocity);
    Some((half_path(velocity, trip.time), Metres::new(uncertainty)))
}

/// The thinnest wall that a set-up reads with a pulse of this -20 dB envelope duration T20.
///
/// Whatever the span, the first back wall must stand clear of what comes before it: the next multiple, or the
/// interface echo. Trains are told from their doubles down to a spacing of 0.62 T20 (found by
/// simulation, 5 and 10 MHz, 60 %, 20 dB); closer than that the echoes merge. From the transmission pulse the
/// back wall must besides lie in the window with its front, half of T20 behind the start.
#[must_use]
pub fn thinnest_wall(setup: &GaugeSetup, envelope_duration: Seconds) -> Metres {
    let law = v_law(setup);
    let mut trip = law.period_of_spacing(envelope_duration.get() * SMALLEST_SPACING);
    if matches!(wall_span(setup), Span::TransmissionPulseToBackWall) {
        let dead = setup.window.from - setup.zero.offset + envelope_duration * 0.5;
        trip = math::larger(trip, law.straighten(dead.get()));
    }
    half_path(setup.velocity(), Seconds::new(trip))
}

/// The thickest wall that a set-up reads with a pulse of this -20 dB envelope duration: its first back wall, or the
/// second between back walls, must lie in the window with its end, half of the duration before the window's. Behind a
/// delay line that also means before the delay line's own second echo, at twice the time of its first, if the set-up
/// states the delay line; the window's end counts from the trigger. Nothing, if no wall fits.
///
/// Whether an echo of so thick a wall stands above the noise is another question.
#[must_use]
pub fn thickest_wall(setup: &GaugeSetup, envelope_duration: Seconds) -> Metres {
    let law = v_law(setup);
    let half = envelope_duration * 0.5;
    let (mut end, mut start) = (setup.window.to, setup.zero.offset);
    if let (ProbeKind::DelayLine, Some(line)) = (setup.probe.kind, setup.probe.delay_line) {
        let interface = line.length * 2.0 / line.velocity;
        start = interface;
        let second = interface * 2.0 - half;
        if second < end {
            end = second;
        }
    }
    let longest = law.straighten((end - half - start).get());
    let trips = match wall_span(setup) {
        Span::BackWallToBackWall => 2.0,
        Span::TransmissionPulseToBackWall | Span::InterfaceToBackWall => 1.0,
    };
    half_path(setup.velocity(), Seconds::new(math::larger(longest, 0.0) / trips))
}

/// The V of a dual-element probe: a beam's spreading does not matter for limits.
fn v_law(setup: &GaugeSetup) -> PathLaw<'static> {
    way::v_path(setup).map_or(PathLaw::Straight, PathLaw::V)
}

/// Smallest spacing of echoes that a train is read with, over the -20 dB duration of the envelope.
pub const SMALLEST_SPACING: f32 = 0.62;

/// Half the way that sound makes in a time.
fn half_path(velocity: MetresPerSecond, time: Seconds) -> Metres {
    velocity * time * 0.5
}

/// The uncertainty of a sum or difference of two independent times.
fn root_of_squares(a: Seconds, b: Seconds) -> Seconds {
    Seconds::new(math::sqrt(a.get() * a.get() + b.get() * b.get()))
}

#[cfg(test)]
mod tests {
    use super::*;
    use crate::setup::{Material, Probe, Window, Zero};
    use crate::units::Hertz;
    use proptest::prelude::*;

    fn setup(span: Span, offset_us: f32) -> GaugeSetup {
        let five = Hertz::from_mhz(5.0);
        let probe = match span {
            Span::InterfaceToBackWall => Probe::delay_line(five, 0.6),
            _ => Probe::contact(five, 0.6),
        };
        GaugeSetup::new(
            Hertz::from_mhz(50.0),
            probe,
            Material::new(MetresPerSecond::new(5920.0), MetresPerSecond::ZERO),
            Zero::new(Seconds::from_us(offset_us), Seconds::ZERO),
            span,
            Window {
                from: Seconds::from_us(1.0),
                to: Seconds::from_us(60.0),
            },
        )
    }

    fn us(time: f32) -> Timed {
        Timed::new(Seconds::from_us(time), Seconds::from_ns(1.0))
    }

    #[test]
    fn three_spans() {
        // Arithmetic of d = c t / 2, in double precision: 3.8784 µs, zero 0.5 µs, 5920 m/s = 10.000064 mm.
        let times = TrainTimes::single(us(3.8784));
        let contact = setup(Span::TransmissionPulseToBackWall, 0.5);
        assert!((wall(&contact, &times).unwrap().as_mm() - 10.000_064).abs() < 2e-6);
        let mut faster = setup(Span::TransmissionPulseToBackWall, 1.2345);
        faster.material.velocity = MetresPerSecond::new(6300.0);
        assert!((wall(&faster, &TrainTimes::single(us(8.0))).unwrap().as_mm() - 21.311_325).abs() < 4e-6);

        // The arrivals of the independent numpy model of a delay-line A-scan, by correlation, and its readings.
        let times = TrainTimes::single(us(9.156_769))
            .with_period(us(1.344_718_6), -0.7)
            .with_interface(us(7.810_181));
        let interface = setup(Span::InterfaceToBackWall, 0.0);
        assert!((wall(&interface, &times).unwrap().as_mm() - 3.985_901).abs() < 5e-6);
        let trip = round_trip(&interface, &times).unwrap();
        assert!((trip.standard_uncertainty.as_ns() - core::f32::consts::SQRT_2).abs() < 1e-5);
        let train = setup(Span::BackWallToBackWall, 77.0);
        assert!((wall(&train, &times).unwrap().as_mm() - 3.980_367).abs() < 2e-6);
    }

    #[test]
    fn what_a_span_needs_must_be_there() {
        let times = TrainTimes::single(us(5.0));
        assert_eq!(wall(&setup(Span::InterfaceToBackWall, 0.0), &times), None);
        assert_eq!(wall(&setup(Span::BackWallToBackWall, 0.0), &times), None);
        assert_eq!(excess(&setup(Span::BackWallToBackWall, 0.0), &times), None);
        let train = times.with_period(us(2.0), 0.0);
        assert_eq!(excess(&setup(Span::InterfaceToBackWall, 0.0), &train), None);
    }

    #[test]
    fn coating_and_wall_from_one_record() {
        // Arrival times by layer arithmetic in double precision: polystyrene | 0.8 mm of coating at 2600 m/s |
        // 3 mm of steel at 5920 m/s. From the front surface to the first back wall: 0.6153846 + 1.0135135 µs.
        let coat = Coating::new(MetresPerSecond::new(2600.0), MetresPerSecond::new(100.0));
        let coating = |setup: &GaugeSetup, times: &TrainTimes| {
            super::coating(setup.coating.as_ref()?, excess(setup, times)?).map(|(thickness, _)| thickness)
        };
        let times = TrainTimes::single(us(8.437_398)).with_period(us(1.013_513_5), -0.7);
        let contact = setup(Span::TransmissionPulseToBackWall, 6.808_5).with_coating(coat);
        assert_eq!(wall_span(&contact), Span::BackWallToBackWall);
        assert!((wall(&contact, &times).unwrap().as_mm() - 3.0).abs() < 2e-6);
        assert!((coating(&contact, &times).unwrap().as_mm() - 0.8).abs() < 2e-6);
        let delay_line = setup(Span::InterfaceToBackWall, 0.0).with_coating(coat);
        let times = times.with_interface(us(6.808_5));
        assert!((coating(&delay_line, &times).unwrap().as_mm() - 0.8).abs() < 2e-6);
        // Not named: not reported.
        assert_eq!(
            coating(&setup(Span::TransmissionPulseToBackWall, 6.808_5), &times),
            None
        );
        // Of unknown velocity: a time, 0.6153846 µs, and no thickness.
        let unknown = contact.with_coating(Coating::UNKNOWN);
        assert_eq!(coating(&unknown, &times), None);
        let trip = excess(&unknown, &times.with_interface(us(6.808_5))).unwrap();
        assert!((trip.time.as_ns() - 615.384_6).abs() < 1e-2, "{trip:?}");
    }

    #[test]
    fn val_uncertainty_of_a_coating() {
        // By hand: 0.8 mm at 2600(100) m/s, 615.3846(5) ns: 1300 · 5 ns = 6.5 µm and 0.8 mm / 26 = 30.76923 µm.
        let coat = Coating::new(MetresPerSecond::new(2600.0), MetresPerSecond::new(100.0));
        let trip = Timed::new(Seconds::from_ns(615.384_6), Seconds::from_ns(5.0));
        let (thickness, u) = coating(&coat, trip).unwrap();
        assert!((thickness.as_mm() - 0.8).abs() < 1e-6);
        let expected = 6.5f32.hypot(30.769_23);
        assert!((u.get() * 1e6 - expected).abs() < 1e-3, "{u:?} {expected}");
        assert_eq!(coating(&Coating::UNKNOWN, trip), None);
    }

    #[test]
    fn excess_carries_the_correlation_of_start_and_period() {
        // Two echoes of 1 ns each: first - (second - first) has the variance 4 + 1 = 5 ns².
        let period = Timed::new(Seconds::from_us(2.0), Seconds::from_ns(core::f32::consts::SQRT_2));
        let times = TrainTimes::single(us(2.5)).with_period(period, -core::f32::consts::FRAC_1_SQRT_2);
        let left = excess(&setup(Span::BackWallToBackWall, 0.5), &times).unwrap();
        assert!((left.standard_uncertainty.as_ns() - 5f32.sqrt()).abs() < 1e-5);
        assert!(left.time.as_ns().abs() < 1e-3);
    }

    #[test]
    fn jitter_moves_what_counts_from_the_trigger() {
        // 3 ns of noise and 4 ns of jitter are 5 ns; the covariance of -3 x 2 x 0.7 ns² stays.
        let first = Timed::new(Seconds::from_us(2.5), Seconds::from_ns(3.0));
        let period = Timed::new(Seconds::from_us(2.0), Seconds::from_ns(2.0));
        let times = TrainTimes::single(first).with_period(period, -0.7);
        let jittered = times.with_jitter(Seconds::from_ns(4.0));
        assert!((jittered.first_back_wall.standard_uncertainty.as_ns() - 5.0).abs() < 1e-5);
        assert!((jittered.first_period_correlation * 5.0 + 0.7 * 3.0).abs() < 1e-5);
        // Variance of first - period: 25 + 4 + 2 x 4.2.
        let left = excess(&setup(Span::BackWallToBackWall, 0.5), &jittered).unwrap();
        assert!((left.standard_uncertainty.as_ns() - 37.4f32.sqrt()).abs() < 1e-5);
        let behind = times.with_interface(us(1.0));
        assert_eq!(behind.with_jitter(Seconds::from_ns(4.0)), behind);
    }

    #[test]
    fn thinnest_wall_by_span() {
        // -20 dB envelope duration of a Gaussian pulse of 5 MHz, 60 %: 535 ns.
        let duration = Seconds::from_ns(535.0);
        let train = thinnest_wall(&setup(Span::BackWallToBackWall, 0.0), duration);
        assert!((train.as_mm() - 0.62 * 0.535 * 2.96).abs() < 1e-5);
        let contact = thinnest_wall(&setup(Span::TransmissionPulseToBackWall, 0.4), duration);
        assert!((contact.as_mm() - (0.6 + 0.2675) * 2.96).abs() < 1e-5);
    }

    #[test]
    fn thickest_wall_by_span() {
        let duration = Seconds::from_ns(500.0);
        // Arithmetic: window to 60 µs, half of 0.5 µs before its end; 5920 m/s.
        let contact = thickest_wall(&setup(Span::TransmissionPulseToBackWall, 0.4), duration);
        assert!((contact.as_mm() - (60.0 - 0.25 - 0.4) * 2.96).abs() < 1e-4);
        let train = thickest_wall(&setup(Span::BackWallToBackWall, 0.0), duration);
        assert!((train.as_mm() - 59.75 * 1.48).abs() < 1e-4);
        // 9.4 mm of 2350 m/s are 8 µs: half a pulse before the delay line's second echo, less half a pulse.
        let mut delay = setup(Span::InterfaceToBackWall, 0.0);
        delay.probe.delay_line = Some(crate::setup::DelayLine {
            length: Metres::from_mm(9.4),
            velocity: MetresPerSecond::new(2350.0),
        });
        assert!((thickest_wall(&delay, duration).as_mm() - 7.5 * 2.96).abs() < 1e-4);
        // Elements 6 mm apart on such blocks hear the thinnest wall later than straight, and it must be thicker for it.
        let mut dual = setup(Span::TransmissionPulseToBackWall, 8.0);
        dual.probe = Probe::dual_element(Hertz::from_mhz(5.0), 0.6)
            .with_separation(crate::setup::ElementSeparation::new(Metres::from_mm(6.0), Metres::ZERO));
        dual.window.from = Seconds::from_us(8.0);
        let straight = {
            let mut other = dual;
            other.probe.separation = None;
            thinnest_wall(&other, duration)
        };
        dual.probe.delay_line = delay.probe.delay_line;
        let bent = thinnest_wall(&dual, duration);
        assert!(bent > straight * 1.1 && bent < straight * 1.6, "{bent} {straight}");
        dual.window.to = dual.window.from;
        dual.window.from = Seconds::ZERO;
        assert_eq!(thickest_wall(&dual, duration), Metres::ZERO);
    }

    proptest! {
        #[test]
        fn a_later_start_moves_start_and_echoes_alike(shift in -5.0f32..50.0, trip in 0.5f32..30.0) {
            let still = setup(Span::TransmissionPulseToBackWall, 1.0);
            let moved = setup(Span::TransmissionPulseToBackWall, 1.0 + shift);
            let a = wall(&still, &TrainTimes::single(us(1.0 + trip))).unwrap();
            let b = wall(&moved, &TrainTimes::single(us(1.0 + shift + trip))).unwrap();
            prop_assert!((a - b).abs().as_mm() < 4e-5);
        }

        #[test]
        fn wall_is_proportional_to_the_period(period in 0.1f32..50.0, times in 0.1f32..10.0) {
            let setup = setup(Span::BackWallToBackWall, 0.0);
            let read = |t| wall(&setup, &TrainTimes::single(us(0.0)).with_period(us(t), 0.0)).unwrap().as_mm();
            prop_assert!((read(period * times) - times * read(period)).abs() <= 1e-6 * read(period * times));
        }

        #[test]
        fn uncertainty_of_the_excess_is_never_lost(u in 0.0f32..100.0, v in 0.0f32..100.0, r in -1.0f32..=1.0) {
            let times = TrainTimes::single(Timed::new(Seconds::from_us(3.0), Seconds::from_ns(u)))
                .with_period(Timed::new(Seconds::from_us(2.0), Seconds::from_ns(v)), r);
            let left = excess(&setup(Span::BackWallToBackWall, 0.0), &times).unwrap().standard_uncertainty.as_ns();
            prop_assert!(left >= (u - v).abs() * 0.999 && left <= (u + v) * 1.001);
        }
    }
}

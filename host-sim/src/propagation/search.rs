//! Finds all paths through a stack: round trips are counted, their orders are not listed.

use super::border::{Factors, Meetings};
use super::{Limits, MOST_PATHS, Path, Role, Stack, reflection_factor};

/// The paths of one enumeration as they are found.
struct Search<'s> {
    stack: &'s Stack,
    limits: &'s Limits,
    /// The border at the centre frequency.
    border: Factors,
    found: Vec<Path>,
}

impl Stack {
    /// All paths within the limits, in the order of their arrival; `None` if there are more than
    /// [`MOST_PATHS`].
    ///
    /// A contact probe's own face gives no echo: it drowns in the transmission pulse.
    #[must_use]
    pub fn paths(&self, limits: &Limits) -> Option<Vec<Path>> {
        let (near, far) = self.border_impedances();
        let mut search = Search {
            stack: self,
            limits,
            border: self.film.as_ref().map_or_else(
                || Factors::plain(reflection_factor(near, far)),
                |film| film.factors(near, far, self.reference),
            ),
            found: Vec::new(),
        };
        let mut scale = 1.0;
        for delays in 1u32.. {
            let start = self.arrival(0, (delays, 0, 0), Role::Interface);
            if delays > 1 && (start > limits.until || f64::abs(scale) < 0.1 * limits.smallest) {
                break;
            }
            search.face(delays, scale);
            search.column(0, delays, scale * self.main_share(), self.back_impedance)?;
            for (place, column) in self.columns.iter().enumerate() {
                search.column(place + 1, delays, scale * column.share, column.back_impedance)?;
            }
            scale *= self.near_end;
            if self.near_end == 0.0 || self.delay_line.is_none() || self.dual.is_some() {
                break;
            }
        }
        search.mode_converted();
        finish(search.found, limits)
    }
}

impl Search<'_> {
    fn push(&mut self, column: usize, trips: (u32, u32, u32), meetings: Meetings, weight: f64) -> Option<()> {
        let stack = self.stack;
        let (delays, coats, walls) = trips;
        let through_coating_once = coats == u32::from(stack.coating.is_some());
        let role = match (walls, coats) {
            _ if delays > 1 => Role::DelayLineMultiple,
            (0, 0) if stack.dual.is_some() => Role::CrossTalk,
            (0, 0) => Role::Interface,
            (1.., _) if through_coating_once => {
                let other = column.checked_sub(1).and_then(|place| stack.columns.get(place));
                other.map_or(Role::BackWall, |column| column.role)
            }
            _ => Role::Coating,
        };
        let amplitude = if meetings == Meetings::default() {
            weight
        } else {
            weight * self.border.sign(meetings) * self.border.product(meetings).magnitude()
        };
        self.found.push(Path {
            column,
            delay_trips: delays,
            coating_trips: coats,
            wall_trips: walls,
            meetings,
            weight,
            amplitude,
            arrival: stack.arrival(column, trips, role),
            role,
            multiple: (role == Role::BackWall).then_some(walls),
        });
        (self.found.len() <= MOST_PATHS).then_some(())
    }

    /// The echo of the face itself, after `delays` trips through the delay line.
    fn face(&mut self, delays: u32, scale: f64) {
        let stack = self.stack;
        if let Some(dual) = &stack.dual {
            self.push(0, (1, 0, 0), Meetings::default(), dual.crosstalk);
        } else if stack.delay_line.is_some() {
            if stack.film.is_some() {
                let meetings = Meetings {
                    front: delays,
                    ..Meetings::default()
                };
                self.push(0, (delays, 0, 0), meetings, scale);
            } else {
                self.push(
                    0,
                    (delays, 0, 0),
                    Meetings::default(),
                    scale * power(self.border.front.re, delays),
                );
            }
        }
    }

    /// Everything that enters the part in one column. `scale` has its share of the beam.
    fn column(&mut self, column: usize, delays: u32, scale: f64, back_impedance: f64) -> Option<()> {
        let stack = self.stack;
        let back = reflection_factor(stack.wall.impedance, back_impedance);
        let outer = self.border.front.re;
        let Some(coating) = stack.coating else {
            for walls in 1..=self.most_wall_trips(column, delays, 0) {
                if stack.film.is_none() {
                    let weight = wall_factor(outer, back, delays, walls);
                    self.push(column, (delays, 0, walls), Meetings::default(), scaled(scale, weight))?;
                    continue;
                }
                for (orders, meetings) in entries(delays, walls) {
                    let weight = scaled(scale, orders * power(back, walls));
                    self.push(column, (delays, 0, walls), meetings, weight)?;
                }
            }
            return Some(());
        };
        let inner = reflection_factor(coating.impedance, stack.wall.impedance);
        // (1 - r_t^2) (-r_t)^(m-1): in once, m - 1 times turned back at the face from below, out once.
        let mut through = 1.0 - outer * outer;
        let mut decay = self.border.through.magnitude();
        for coats in 1u32.. {
            let arrival = stack.arrival(column, (delays, coats, 0), Role::Coating);
            if arrival > self.limits.until || decay < 0.1 * self.limits.smallest {
                break;
            }
            // Sound in the coating alone does not tell walls apart: it is counted once.
            let first = u32::from(column > 0);
            for walls in first..=self.most_wall_trips(column, delays, coats) {
                let scale = if walls == 0 { scale / stack.main_share() } else { scale };
                let inside = wall_factor(inner, back, coats, walls);
                if stack.film.is_some() {
                    for (orders, meetings) in entries(delays, coats) {
                        self.push(column, (delays, coats, walls), meetings, scaled(scale, orders * inside))?;
                    }
                } else {
                    let entered = if delays == 1 {
                        through
                    } else {
                        wall_factor(outer, 1.0, delays, coats)
                    };
                    let weight = scaled(scale, entered * inside);
                    self.push(column, (delays, coats, walls), Meetings::default(), weight)?;
                }
            }
            through *= -outer;
            decay *= self.border.below.magnitude();
        }
        Some(())
    }

    /// Behind the first back wall: one way as a shear wave.
    fn mode_converted(&mut self) {
        let Some(conversion) = &self.stack.mode_conversion else {
            return;
        };
        let first = self.found.iter().find(|path| path.multiple == Some(1)).copied();
        if let Some(first) = first {
            let trips = (first.delay_trips, first.coating_trips, first.wall_trips);
            self.found.push(Path {
                weight: first.weight * conversion.amplitude,
                amplitude: first.amplitude * conversion.amplitude,
                arrival: self.stack.arrival(0, trips, Role::ModeConverted),
                role: Role::ModeConverted,
                multiple: None,
                ..first
            });
        }
    }

    fn most_wall_trips(&self, column: usize, delays: u32, coats: u32) -> u32 {
        // A V is never shorter than its layers straight down.
        let from = match self.stack.dual {
            Some(_) => self.stack.face_time(),
            None => self.stack.arrival(column, (delays, coats, 0), Role::Coating),
        };
        let round_trip = 2.0 * self.stack.thickness(column) / self.stack.wall.velocity;
        let fitting = (self.limits.until - from) / round_trip;
        let most = f64::from(self.limits.wall_trips).min(MOST_PATHS as f64 + 1.0);
        if fitting > 0.0 { fitting.min(most) as u32 } else { 0 }
    }
}

/// Without other walls the share is 1, and the product must not be rounded.
fn scaled(scale: f64, weight: f64) -> f64 {
    if scale == 1.0 { weight } else { scale * weight }
}

/// The ways in which `trips` round trips behind the border share `meetings` visits to it from the
/// probe, by how many of these go in: number of orders, and how often the border is met.
fn entries(meetings: u32, trips: u32) -> impl Iterator<Item = (f64, Meetings)> {
    (1..=meetings.min(trips)).map(move |inside| {
        (
            binomial(meetings, inside) * binomial(trips - 1, inside - 1),
            Meetings {
                front: meetings - inside,
                through: inside,
                below: trips - inside,
            },
        )
    })
}

/// Coefficient of n wall trips in G^m, where G = r + sum over n of (1 - r^2) s (-r s)^(n-1): seen from
/// above, the border reflects r, or lets sound in for one or more round trips between back wall (s)
/// and border (-r). j of the m meetings go into the wall, in C(m, j) orders, and share the n trips in
/// C(n - 1, j - 1) ways.
fn wall_factor(front: f64, back: f64, meetings: u32, trips: u32) -> f64 {
    if trips == 0 {
        return power(front, meetings);
    }
    let mut sum = 0.0;
    for inside in 1..=meetings.min(trips) {
        sum += binomial(meetings, inside)
            * binomial(trips - 1, inside - 1)
            * power(front, meetings - inside)
            * power(1.0 - front * front, inside)
            * power(-front, trips - inside);
    }
    sum * power(back, trips)
}

fn binomial(of: u32, choose: u32) -> f64 {
    (0..choose).fold(1.0, |product, i| product * f64::from(of - i) / f64::from(i + 1))
}

/// Whole powers by repeated squaring: the same bits on every machine.
fn power(base: f64, exponent: u32) -> f64 {
    let (mut result, mut square, mut left) = (1.0, base, exponent);
    while left > 0 {
        if left & 1 == 1 {
            result *= square;
        }
        square *= square;
        left >>= 1;
    }
    result
}

fn finish(mut paths: Vec<Path>, limits: &Limits) -> Option<Vec<Path>> {
    // Counts of orders overflow in a stack that rings for thousands of round trips.
    if !paths.iter().all(|path| path.amplitude.is_finite()) {
        return None;
    }
    let strongest = paths.iter().map(|path| path.amplitude.abs()).fold(0.0, f64::max);
    paths.retain(|path| path.arrival <= limits.until && path.amplitude.abs() > limits.smallest * strongest);
    paths.sort_by(|a, b| a.arrival.total_cmp(&b.arrival));
    Some(paths)
}

//! The drive over time: pieces that are straight lines.

/// A stretch of time over which the drive goes in a straight line.
#[derive(Clone, Copy, Debug, PartialEq)]
pub struct Piece {
    /// Start, seconds.
    pub start_s: f64,
    /// End, seconds, after the start.
    pub end_s: f64,
    /// Drive at the start, pA or nS.
    pub from: f64,
    /// Drive at the end; equal to `from` for a constant piece.
    pub to: f64,
}

/// Why a drive cannot be run.
#[derive(Clone, Copy, Debug, PartialEq, thiserror::Error)]
pub enum DriveError {
    /// A time or drive that is not finite.
    #[error("entry {index}: a time or drive is not a finite number")]
    NotFinite {
        /// 0-based entry.
        index: usize,
    },
    /// A piece that does not end after its start, or samples whose times do not ascend.
    #[error(
        "entry {index}: ends or stands at {end_s} s, not after {start_s} s; sort by time and drop repeats"
    )]
    NotAscending {
        /// 0-based entry.
        index: usize,
        /// Time it has to be after, seconds.
        start_s: f64,
        /// Its time, seconds.
        end_s: f64,
    },
    /// A piece that begins before the one before it ends.
    #[error("piece {index} begins at {start_s} s, before the one before it ends at {end_s} s")]
    Overlap {
        /// 0-based piece.
        index: usize,
        /// Its start, seconds.
        start_s: f64,
        /// The end of the one before, seconds.
        end_s: f64,
    },
    /// A gap between samples.
    #[error(
        "samples {index} and the one before are {gap_s} s apart, more than {limit_s} s; split the waveform there"
    )]
    Gap {
        /// 0-based sample after the gap.
        index: usize,
        /// Its length, seconds.
        gap_s: f64,
        /// Longest allowed, seconds.
        limit_s: f64,
    },
    /// Fewer than two samples.
    #[error("a waveform needs two samples, it has {found}")]
    FewSamples {
        /// Samples.
        found: usize,
    },
}

/// How a sampled waveform goes between its samples.
#[derive(Clone, Copy, Debug, PartialEq, Eq)]
pub enum Between {
    /// A sample holds until the next one (digital output).
    Held,
    /// A straight line to the next one.
    Straight,
}

/// A drive over time. Outside its pieces it has its `rest` value.
#[derive(Clone, Debug, PartialEq)]
pub struct Drive {
    pieces: Vec<Piece>,
    rest: f64,
}

impl Drive {
    /// From pieces in order of time; between them the drive is `rest` (0 for a cell that is left alone).
    ///
    /// # Errors
    /// Numbers that are not finite, pieces without length, out of order or overlapping.
    pub fn new(pieces: Vec<Piece>, rest: f64) -> Result<Self, DriveError> {
        let mut before = f64::NEG_INFINITY;
        for (index, p) in pieces.iter().enumerate() {
            if ![p.start_s, p.end_s, p.from, p.to, rest]
                .iter()
                .all(|x| x.is_finite())
            {
                return Err(DriveError::NotFinite { index });
            }
            if p.end_s <= p.start_s {
                return Err(DriveError::NotAscending {
                    index,
                    start_s: p.start_s,
                    end_s: p.end_s,
                });
            }
            if p.start_s < before {
                return Err(DriveError::Overlap {
                    index,
                    start_s: p.start_s,
                    end_s: before,
                });
            }
            before = p.end_s;
        }
        Ok(Self { pieces, rest })
    }

    /// From samples of a waveform. A held waveform's last sample lasts as long as the one before it. Samples further
    /// apart than `longest_gap` times the median distance are a gap.
    ///
    /// # Errors
    /// Fewer than two samples, numbers that are not finite, times that do not ascend, a gap.
    pub fn sampled(
        times_s: &[f64],
        drives: &[f64],
        between: Between,
        rest: f64,
        longest_gap: f64,
    ) -> Result<Self, DriveError> {
        let n = times_s.len().min(drives.len());
        if n < 2 {
            return Err(DriveError::FewSamples { found: n });
        }
        for i in 0..n {
            if !(times_s[i].is_finite() && drives[i].is_finite()) {
                return Err(DriveError::NotFinite { index: i });
            }
            if i > 0 && times_s[i] <= times_s[i - 1] {
                return Err(DriveError::NotAscending {
                    index: i,
                    start_s: times_s[i - 1],
                    end_s: times_s[i],
                });
            }
        }
        let mut distances: Vec<f64> = times_s[..n].windows(2).map(|w| w[1] - w[0]).collect();
        let last = distances[n - 2];
        let limit_s = {
            let middle = distances.len() / 2;
            let (_, median, _) = distances.select_nth_unstable_by(middle, f64::total_cmp);
            longest_gap * *median
        };
        let mut pieces = Vec::with_capacity(n);
        for i in 1..n {
            let gap_s = times_s[i] - times_s[i - 1];
            if gap_s > limit_s {
                return Err(DriveError::Gap {
                    index: i,
                    gap_s,
                    limit_s,
                });
            }
            pieces.push(Piece {
                start_s: times_s[i - 1],
                end_s: times_s[i],
                from: drives[i - 1],
                to: match between {
                    Between::Held => drives[i - 1],
                    Between::Straight => drives[i],
                },
            });
        }
        if between == Between::Held {
            pieces.push(Piece {
                start_s: times_s[n - 1],
                end_s: times_s[n - 1] + last,
                from: drives[n - 1],
                to: drives[n - 1],
            });
        }
        Self::new(pieces, rest)
    }

    /// The pieces given, in order of time.
    pub fn pieces(&self) -> &[Piece] {
        &self.pieces
    }

    /// The drive outside the pieces.
    pub fn rest(&self) -> f64 {
        self.rest
    }

    /// Start of the first piece and end of the last, seconds; `None` without a piece.
    pub fn span(&self) -> Option<[f64; 2]> {
        Some([self.pieces.first()?.start_s, self.pieces.last()?.end_s])
    }

    /// The drive at a time; at a jump the value after it.
    pub fn at(&self, time_s: f64) -> f64 {
        let after = self.pieces.partition_point(|p| p.start_s <= time_s);
        match after.checked_sub(1).and_then(|i| self.pieces.get(i)) {
            Some(p) if time_s < p.end_s => {
                p.from + (p.to - p.from) * ((time_s - p.start_s) / (p.end_s - p.start_s))
            }
            _ => self.rest,
        }
    }

    /// The time from `from` to `to` as pieces without gaps.
    pub fn between(&self, from: f64, to: f64) -> Vec<Piece> {
        let mut list = Vec::new();
        let mut at = from;
        let rest = |start_s: f64, end_s: f64| Piece {
            start_s,
            end_s,
            from: self.rest,
            to: self.rest,
        };
        let first = self.pieces.partition_point(|p| p.end_s <= from);
        for p in &self.pieces[first..] {
            if p.start_s >= to {
                break;
            }
            if p.start_s > at {
                list.push(rest(at, p.start_s));
            }
            let (start_s, end_s) = (p.start_s.max(from), p.end_s.min(to));
            let slope = (p.to - p.from) / (p.end_s - p.start_s);
            list.push(Piece {
                start_s,
                end_s,
                from: p.from + slope * (start_s - p.start_s),
                to: if end_s == p.end_s {
                    p.to
                } else {
                    p.from + slope * (end_s - p.start_s)
                },
            });
            at = end_s;
        }
        if at < to {
            list.push(rest(at, to));
        }
        list
    }
}

#[cfg(test)]
mod tests {
    #![allow(clippy::unwrap_used)]
    use super::*;

    fn piece(start_s: f64, end_s: f64, from: f64, to: f64) -> Piece {
        Piece {
            start_s,
            end_s,
            from,
            to,
        }
    }

    #[test]
    fn pieces_rest_and_jumps() {
        let drive = Drive::new(vec![piece(1.0, 2.0, 5.0, 5.0), piece(3.0, 5.0, 0.0, 8.0)], -1.0).unwrap();
        for (t, value) in [(0.0, -1.0), (1.0, 5.0), (2.0, -1.0), (4.0, 4.0), (5.0, -1.0)] {
            assert_eq!(drive.at(t), value, "{t}");
        }
        assert_eq!(
            drive.between(1.5, 4.0),
            [
                piece(1.5, 2.0, 5.0, 5.0),
                piece(2.0, 3.0, -1.0, -1.0),
                piece(3.0, 4.0, 0.0, 4.0)
            ]
        );
        assert_eq!(drive.between(6.0, 7.0), [piece(6.0, 7.0, -1.0, -1.0)]);
        assert_eq!(drive.span(), Some([1.0, 5.0]));
    }

    #[test]
    fn waveforms_held_and_straight() {
        let (t, x) = ([0.0, 0.1, 0.2], [1.0, 2.0, 4.0]);
        let held = Drive::sampled(&t, &x, Between::Held, 0.0, 1.5).unwrap();
        assert_eq!((held.at(0.05), held.at(0.25)), (1.0, 4.0));
        assert!((held.span().unwrap()[1] - 0.3).abs() < 1e-12);
        let straight = Drive::sampled(&t, &x, Between::Straight, 0.0, 1.5).unwrap();
        assert!((straight.at(0.15) - 3.0).abs() < 1e-12);
        assert_eq!(straight.at(0.25), 0.0);
    }

    #[test]
    fn bad_drives_are_refused_with_their_place() {
        let overlap = Drive::new(vec![piece(0.0, 2.0, 1.0, 1.0), piece(1.0, 3.0, 1.0, 1.0)], 0.0);
        assert!(matches!(overlap, Err(DriveError::Overlap { index: 1, .. })));
        let empty = Drive::new(vec![piece(2.0, 2.0, 1.0, 1.0)], 0.0);
        assert!(matches!(empty, Err(DriveError::NotAscending { index: 0, .. })));
        let nan = Drive::new(vec![piece(2.0, 3.0, f64::NAN, 1.0)], 0.0);
        assert_eq!(nan, Err(DriveError::NotFinite { index: 0 }));
        let sampled = |t: &[f64]| Drive::sampled(t, &[0.0; 9][..t.len()], Between::Held, 0.0, 1.5);
        assert!(matches!(
            sampled(&[0.0, 0.2, 0.1]),
            Err(DriveError::NotAscending { index: 2, .. })
        ));
        assert!(matches!(
            sampled(&[0.0, 0.1, 0.2, 0.3, 0.6]),
            Err(DriveError::Gap { index: 4, .. })
        ));
        assert_eq!(sampled(&[0.0]), Err(DriveError::FewSamples { found: 1 }));
    }
}

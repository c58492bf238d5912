//! Small systems of linear equations.

/// Solves symmetric positive definite equations given by their upper triangle and, in the last column, their right
/// side; in place. `None` if they are not positive definite.
pub(super) fn solve<const N: usize, const M: usize>(rows: &mut [[f32; M]; N]) -> Option<[f32; N]> {
    for pivot in 0..N {
        let (lead, below) = rows.get_mut(pivot..)?.split_first_mut()?;
        let lead = lead.get(pivot..)?;
        let (&own, rest) = lead.split_first()?;
        if !(own > 0.0) {
            return None;
        }
        let inverse = 1.0 / own;
        for (place, row) in below.iter_mut().enumerate() {
            let factor = rest.get(place)? * inverse;
            let cells = row.get_mut(pivot + 1 + place..)?;
            for (cell, above) in cells.iter_mut().zip(rest.get(place..)?) {
                *cell -= factor * above;
            }
        }
    }
    let mut answer = [0.0; N];
    for place in (0..N).rev() {
        let row = rows.get(place)?;
        let mut sum = *row.last()?;
        for (cell, known) in row.iter().zip(&answer).skip(place + 1) {
            sum -= cell * known;
        }
        *answer.get_mut(place)? = sum / row.get(place)?;
    }
    Some(answer)
}

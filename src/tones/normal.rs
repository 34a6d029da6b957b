//! Least squares by normal equations, summed up row by row.

/// Normal equations of a least-squares fit.
#[derive(Clone)]
pub(super) struct Normal {
    size: usize,
    /// Row after row, the right-hand side last in each.
    matrix: Vec<f64>,
}

impl Normal {
    pub(super) fn new(size: usize) -> Normal {
        Normal {
            size,
            matrix: vec![0.0; size * (size + 1)],
        }
    }

    pub(super) fn add(&mut self, row: &[f64], value: f64) {
        for (&factor, line) in row.iter().zip(self.matrix.chunks_exact_mut(self.size + 1)) {
            for (sum, &other) in line.iter_mut().zip(row) {
                *sum += factor * other;
            }
            if let Some(last) = line.last_mut() {
                *last += factor * value;
            }
        }
    }

    /// By elimination with the largest pivot; 0 for what the samples leave open.
    pub(super) fn solve(mut self) -> Vec<f64> {
        let (n, width) = (self.size, self.size + 1);
        let m = &mut self.matrix;
        let largest = m.iter().fold(0.0f64, |most, &x| most.max(x.abs()));
        for column in 0..n {
            let pivot = (column..n)
                .max_by(|&a, &b| {
                    m[a * width + column]
                        .abs()
                        .total_cmp(&m[b * width + column].abs())
                })
                .unwrap_or(column);
            if m[pivot * width + column].abs() <= 1e-9 * largest {
                continue;
            }
            for k in 0..width {
                m.swap(column * width + k, pivot * width + k);
            }
            for row in (0..n).filter(|&row| row != column) {
                let factor = m[row * width + column] / m[column * width + column];
                for k in column..width {
                    m[row * width + k] -= factor * m[column * width + k];
                }
            }
        }
        (0..n)
            .map(|row| match m[row * width + row] {
                pivot if pivot.abs() <= 1e-9 * largest => 0.0,
                pivot => m[row * width + n] / pivot,
            })
            .collect()
    }
}

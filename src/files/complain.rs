//! Complaints that several readers share, so that one fault has one wording.

use crate::base::Complaint;

/// Rows that need no justification by the file's length: their pointers take 8 MiB.
const ROWS_FREE: u64 = 1 << 20;

/// The longest line that is read.
pub const LINE_BYTES_MAX: usize = 1 << 20;

pub fn nonfinite(what: &str) -> Complaint {
    Complaint::new(
        format!("{what} is not a finite number"),
        "correct the value, or pass --allow-nonfinite if it is meant",
    )
}

pub fn changed() -> Complaint {
    Complaint::new(
        "the file changed while it was being read",
        "wait until whatever writes it has finished, then run again",
    )
}

/// Refuses a number of rows that a file of `bytes` bytes cannot mean: each row takes memory, and
/// a file of real rows has at least a byte for each.
pub fn justify_rows(rows: u64, bytes: u64) -> Result<(), Complaint> {
    if rows > ROWS_FREE && rows > bytes {
        return Err(Complaint::new(
            format!("{rows} rows are declared, but the text is only {bytes} bytes long"),
            "correct the declared number of rows, or give the whole file",
        ));
    }
    Ok(())
}

/// Rows and columns are numbered in 32 bits.
pub fn justify_shape(rows: u64, columns: u64) -> Result<(), Complaint> {
    for (count, what) in [(rows, "rows"), (columns, "columns")] {
        if count > u64::from(u32::MAX) {
            return Err(Complaint::new(
                format!("{count} {what} are declared; at most {} can be held", u32::MAX),
                format!("correct the size, or split the system into fewer {what}"),
            ));
        }
        if count == 0 {
            return Err(Complaint::new(
                format!("the declared size is {rows} by {columns}: there are no {what}"),
                "give a matrix with at least one row and one column",
            ));
        }
    }
    Ok(())
}

/// Values that f32 storage cannot hold.
pub fn check_single(value: f64, what: impl Fn() -> String) -> Result<(), Complaint> {
    let kept = value as f32;
    let fault = |happens: &str| {
        Err(Complaint::new(
            format!("{} is {value:e}, which {happens} in single precision", what()),
            "use --precision double, or change the unit so that values are nearer to 1",
        ))
    };
    if kept.is_infinite() && value.is_finite() {
        return fault("overflows");
    }
    if kept == 0.0 && value != 0.0 {
        return fault("vanishes");
    }
    Ok(())
}

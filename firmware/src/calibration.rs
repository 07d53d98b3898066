//! Codes to volts, in integers.
//!
//! The mean code is a fraction, sum / count, so volts = a0 + a1 sum / count + a2 (sum / count)^2. The products are formed
//! before the divisions and in 128 bits: |a1 sum| stays below 1e13 pV x 2^23 < 2^67, and the square below 2^46 times 2^63.
//! Each division rounds to nearest, half a nanovolt each, and the result to a microvolt: at most 0.5 uV + 1 nV off the exact
//! value, which is below 1/1000 of a code's worth for slopes from 1 mV a code on (1/100 is asked for).

use ringvolt_protocol::CodeToVolts;

/// Microvolts at the divider's input for `count` conversions with this sum of codes; `None` without conversions or
/// beyond what 64 bits of microvolts hold.
pub fn microvolts(line: &CodeToVolts, sum: i32, count: u8) -> Option<i64> {
    if count == 0 {
        return None;
    }
    let (sum, count) = (i128::from(sum), i128::from(count));
    let offset_nv = i128::from(line.offset_nv);
    let slope_nv = divide(i128::from(line.slope_pv) * sum, 1_000 * count);
    // 1e-18 V = 1e-9 nV.
    let bend_nv = divide(i128::from(line.bend_av).checked_mul(sum * sum)?, 1_000_000_000 * count * count);
    i64::try_from(divide(offset_nv + slope_nv + bend_nv, 1_000)).ok()
}

/// The same in millivolts.
pub fn millivolts(line: &CodeToVolts, sum: i32, count: u8) -> Option<i32> {
    i32::try_from(divide(i128::from(microvolts(line, sum, count)?), 1_000)).ok()
}

/// Quotient to the nearest, for a positive divisor.
fn divide(value: i128, divisor: i128) -> i128 {
    let half = divisor / 2;
    let dividend = if value >= 0 { value + half } else { value - half };
    // A division of 128 bits takes the board's processor 4000 cycles, one of 64 bits a tenth of it, and nearly every
    // value there is fits.
    match (i64::try_from(dividend), i64::try_from(divisor)) {
        (Ok(dividend), Ok(divisor)) => i128::from(dividend / divisor),
        _ => dividend / divisor,
    }
}

#[cfg(test)]
mod tests {
    use proptest::prelude::*;

    use super::*;

    #[test]
    fn a_known_line_gives_known_volts() {
        let line = CodeToVolts { offset_nv: 200_000_000, slope_pv: 312_562_500_000, ..Default::default() };
        // 9 conversions of mean code 8000: 0.2 V + 2500.5 V.
        assert_eq!(microvolts(&line, 72_000, 9), Some(2_500_700_000));
        assert_eq!(millivolts(&line, -72_000, 9), Some(-2_500_300));
        assert_eq!(microvolts(&line, 0, 0), None);
    }

    proptest! {
        /// Against exact rational arithmetic: never further than 0.51 uV, and far below 1/100 of a code's worth.
        #[test]
        fn rounding_stays_below_a_hundredth_of_a_code(
            offset_nv in -10_000_000_000i64..10_000_000_000,
            slope_pv in 1_000_000_000i64..10_000_000_000_000,
            bend_av in -10_000_000_000i64..10_000_000_000,
            mean in -32_768i32..=32_767,
            extra in -8i32..=8,
            count in 1u8..=60,
        ) {
            let line = CodeToVolts { offset_nv, slope_pv, bend_av, code_min: 0, code_max: 0 };
            let sum = (mean * i32::from(count) + extra).clamp(-32_768 * i32::from(count), 32_767 * i32::from(count));
            let ours = microvolts(&line, sum, count).unwrap();
            // Exact value times count^2 times 1e12 (attovolts).
            let (s, n) = (i128::from(sum), i128::from(count));
            let exact_av = i128::from(offset_nv) * 1_000_000_000 * n * n
                + i128::from(slope_pv) * 1_000_000 * s * n
                + i128::from(bend_av) * s * s;
            let off_av = (i128::from(ours) * 1_000_000_000_000 * n * n - exact_av).abs();
            prop_assert!(off_av <= 510_000_000_000 * n * n, "off by {} aV", off_av / (n * n));
            prop_assert!(off_av * 100 < i128::from(slope_pv) * 1_000_000 * n * n);
        }

        #[test]
        fn nothing_overflows(offset_nv: i64, slope_pv: i64, bend_av: i64, sum: i32, count: u8) {
            let line = CodeToVolts { offset_nv, slope_pv, bend_av, code_min: 0, code_max: 0 };
            let _ = millivolts(&line, sum, count);
        }
    }
}

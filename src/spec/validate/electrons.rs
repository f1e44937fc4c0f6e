//! Charge and multiplicity: which go together.

use crate::spec::diagnostic::any_of;

/// Number of electrons that a charge leaves.
///
/// # Errors
/// What is wrong, when none or fewer are left.
pub(super) fn electrons(nuclear_charge: i64, charge: i32) -> Result<usize, String> {
    let left = nuclear_charge - i64::from(charge);
    match usize::try_from(left) {
        Ok(electrons) if electrons > 0 => Ok(electrons),
        _ => Err(format!(
            "a charge of {charge} leaves none of the {nuclear_charge} electrons of the neutral atoms"
        )),
    }
}

/// Whether a multiplicity is possible.
pub(super) fn is_possible(electrons: usize, multiplicity: u32) -> bool {
    let multiplicity = multiplicity as usize;
    multiplicity >= 1 && multiplicity <= electrons + 1 && multiplicity % 2 != electrons % 2
}

/// The multiplicity of the fewest unpaired electrons.
pub(super) fn lowest(electrons: usize) -> u32 {
    if electrons.is_multiple_of(2) { 1 } else { 2 }
}

/// The possible multiplicities, in words.
pub(super) fn possible(electrons: usize) -> String {
    let all: Vec<String> = (1..=electrons + 1)
        .filter(|m| m % 2 != electrons % 2)
        .map(|m| m.to_string())
        .collect();
    match all.len() {
        0..=5 => any_of(&all),
        _ => format!("{}, … {}", all[..4].join(", "), all[all.len() - 1]),
    }
}

/// `singlet`, `doublet`, …
pub(super) fn spin_word(multiplicity: u32) -> String {
    let words = [
        "singlet", "doublet", "triplet", "quartet", "quintet", "sextet", "septet",
    ];
    match words.get((multiplicity as usize).wrapping_sub(1)) {
        Some(word) => (*word).to_owned(),
        None => format!("multiplicity {multiplicity}"),
    }
}

#[cfg(test)]
mod tests {
    use super::*;

    #[test]
    fn multiplicities_have_the_other_parity_and_no_more_than_all_unpaired() {
        assert_eq!(possible(1), "2");
        assert_eq!(possible(2), "1 or 3");
        assert_eq!(possible(9), "2, 4, 6, 8 or 10");
        assert_eq!(possible(40), "1, 3, 5, 7, … 41");
        for electrons in 1..20 {
            assert!(is_possible(electrons, lowest(electrons)));
            assert!(!is_possible(electrons, 0));
            assert!(!is_possible(electrons, u32::try_from(electrons).unwrap()));
            assert!(is_possible(
                electrons,
                u32::try_from(electrons).unwrap() + 1
            ));
            assert!(!is_possible(
                electrons,
                u32::try_from(electrons).unwrap() + 3
            ));
        }
    }
}

//! Chemical elements: symbols, atomic numbers, isotopic masses and covalent radii.

/// A chemical element, H to Kr.
#[derive(Debug, Clone, Copy, PartialEq, Eq, Hash, PartialOrd, Ord)]
pub struct Element(u8);

const SYMBOLS: [&str; 36] = [
    "H", "He", "Li", "Be", "B", "C", "N", "O", "F", "Ne", "Na", "Mg", "Al", "Si", "P", "S", "Cl",
    "Ar", "K", "Ca", "Sc", "Ti", "V", "Cr", "Mn", "Fe", "Co", "Ni", "Cu", "Zn", "Ga", "Ge", "As",
    "Se", "Br", "Kr",
];

impl Element {
    /// The heaviest element known here: krypton.
    pub const LAST_ATOMIC_NUMBER: u8 = 36;

    /// The element of atomic number `z`, if it is one of H–Kr.
    #[must_use]
    pub fn from_atomic_number(z: u8) -> Option<Self> {
        (1..=Self::LAST_ATOMIC_NUMBER)
            .contains(&z)
            .then_some(Self(z))
    }

    /// The element of a symbol, in any case (`"cl"`, `"CL"` and `"Cl"` are chlorine).
    #[must_use]
    pub fn from_symbol(symbol: &str) -> Option<Self> {
        let place = SYMBOLS
            .iter()
            .position(|s| s.eq_ignore_ascii_case(symbol))?;
        Self::from_atomic_number(u8::try_from(place + 1).ok()?)
    }

    /// Atomic number.
    #[must_use]
    pub fn atomic_number(self) -> u8 {
        self.0
    }

    /// Nuclear charge in units of e.
    #[must_use]
    pub fn nuclear_charge(self) -> f64 {
        f64::from(self.0)
    }

    /// Symbol with its usual capitals.
    #[must_use]
    pub fn symbol(self) -> &'static str {
        SYMBOLS[usize::from(self.0) - 1]
    }

    /// All elements in order of atomic number.
    pub fn all() -> impl Iterator<Item = Self> {
        (1..=Self::LAST_ATOMIC_NUMBER).map(Self)
    }
}

//! Chemical elements: symbols, atomic numbers, isotopic masses and covalent radii.

/// A chemical element, H to Kr.
#[derive(Debug, Clone, Copy, PartialEq, Eq, Hash, PartialOrd, Ord)]
pub struct Element(u8);

const SYMBOLS: [&str; 36] = [
    "H", "He", "Li", "Be", "B", "C", "N", "O", "F", "Ne", "Na", "Mg", "Al", "Si", "P", "S", "Cl",
    "Ar", "K", "Ca", "Sc", "Ti", "V", "Cr", "Mn", "Fe", "Co", "Ni", "Cu", "Zn", "Ga", "Ge", "As",
    "Se", "Br", "Kr",
];

/// Isotopes as (mass number, mass of the neutral atom in u), by atomic number: all that occur in
/// nature, with ³H and ¹⁴C besides.
///
/// Source: M. Wang, W. J. Huang, F. G. Kondev, G. Audi, S. Naimi, *The AME 2020 atomic mass evaluation
/// (II)*, Chin. Phys. C 45, 030003 (2021), taken from the open data package `mendeleev` 1.3.0 (PyPI) and
/// compared with `periodictable` 2.1.0 (agreement within twice the standard uncertainty or 2e-10 u).
const ISOTOPES: [&[(u16, f64)]; 36] = [
    &[(1, 1.007825031898), (2, 2.014101777844), (3, 3.01604928132)], // H
    &[(3, 3.01602932197), (4, 4.00260325413)],                       // He
    &[(6, 6.01512288742), (7, 7.01600343426)],                       // Li
    &[(9, 9.012183062)],                                             // Be
    &[(10, 10.012936862), (11, 11.009305166)],                       // B
    &[(12, 12.0), (13, 13.00335483534), (14, 14.00324198862)],       // C
    &[(14, 14.00307400425), (15, 15.00010889827)],                   // N
    &[
        (16, 15.99491461926),
        (17, 16.99913175595),
        (18, 17.99915961214),
    ], // O
    &[(19, 18.99840316207)],                                         // F
    &[(20, 19.99244017525), (21, 20.993846685), (22, 21.991385113)], // Ne
    &[(23, 22.98976928195)],                                         // Na
    &[(24, 23.985041689), (25, 24.985836966), (26, 25.982592972)],   // Mg
    &[(27, 26.981538408)],                                           // Al
    &[
        (28, 27.97692653442),
        (29, 28.97649466434),
        (30, 29.973770137),
    ], // Si
    &[(31, 30.97376199768)],                                         // P
    &[
        (32, 31.97207117354),
        (33, 32.97145890862),
        (34, 33.967867011),
        (36, 35.967080692),
    ], // S
    &[(35, 34.968852694), (37, 36.965902573)],                       // Cl
    &[(36, 35.967545106), (38, 37.962732102), (40, 39.96238312204)], // Ar
    &[
        (39, 38.96370648482),
        (40, 39.963998165),
        (41, 40.96182525611),
    ], // K
    &[
        (40, 39.96259085),
        (42, 41.95861778),
        (43, 42.958766381),
        (44, 43.955481489),
        (46, 45.953687726),
        (48, 47.952522654),
    ], // Ca
    &[(45, 44.955907051)],                                           // Sc
    &[
        (46, 45.952626356),
        (47, 46.951757491),
        (48, 47.947940677),
        (49, 48.947864391),
        (50, 49.944785622),
    ], // Ti
    &[(50, 49.947156681), (51, 50.943957664)],                       // V
    &[
        (50, 49.946042209),
        (52, 51.940504714),
        (53, 52.940646304),
        (54, 53.938877359),
    ], // Cr
    &[(55, 54.93804304)],                                            // Mn
    &[
        (54, 53.939608189),
        (56, 55.934935537),
        (57, 56.93539195),
        (58, 57.933273575),
    ], // Fe
    &[(59, 58.933193524)],                                           // Co
    &[
        (58, 57.93534165),
        (60, 59.930785129),
        (61, 60.931054819),
        (62, 61.928344753),
        (64, 63.927966228),
    ], // Ni
    &[(63, 62.929597119), (65, 64.927789476)],                       // Cu
    &[
        (64, 63.929141776),
        (66, 65.926033639),
        (67, 66.927127422),
        (68, 67.924844232),
        (70, 69.925319175),
    ], // Zn
    &[(69, 68.925573528), (71, 70.924702554)],                       // Ga
    &[
        (70, 69.924248542),
        (72, 71.922075824),
        (73, 72.923458954),
        (74, 73.92117776),
        (76, 75.921402725),
    ], // Ge
    &[(75, 74.921594562)],                                           // As
    &[
        (74, 73.922475933),
        (76, 75.919213702),
        (77, 76.91991415),
        (78, 77.917309244),
        (80, 79.916521761),
        (82, 81.916699531),
    ], // Se
    &[(79, 78.918337574), (81, 80.916288197)],                       // Br
    &[
        (78, 77.920366341),
        (80, 79.91637794),
        (82, 81.91348115368),
        (83, 82.914126516),
        (84, 83.91149772708),
        (86, 85.91061062468),
    ], // Kr
];

/// Mass number of the most abundant isotope, by atomic number.
///
/// Source: representative isotopic compositions (IUPAC) in `mendeleev` 1.3.0 and `periodictable` 2.1.0
/// (PyPI), which name the same isotope for each element.
const MOST_ABUNDANT: [u16; 36] = [
    1, 4, 7, 9, 11, 12, 14, 16, 19, 20, 23, 24, 27, 28, 31, 32, 35, 40, 39, 40, 45, 48, 51, 52, 55,
    56, 59, 58, 63, 64, 69, 74, 75, 80, 79, 84,
];

/// Covalent radii in ångström, by atomic number; sp³ for carbon, low spin for Mn, Fe and Co.
///
/// Source: B. Cordero et al., *Covalent radii revisited*, Dalton Trans. 2008, 2832, table 2, taken from
/// the open data package `periodictable` 2.1.0 (PyPI); `mendeleev` 1.3.0 agrees, but for C, Mn, Fe and
/// Co, of which it holds averages.
const COVALENT_RADII_ANGSTROM: [f64; 36] = [
    0.31, 0.28, 1.28, 0.96, 0.84, 0.76, 0.71, 0.66, 0.57, 0.58, 1.66, 1.41, 1.21, 1.11, 1.07, 1.05,
    1.02, 1.06, 2.03, 1.76, 1.7, 1.6, 1.53, 1.39, 1.39, 1.32, 1.26, 1.24, 1.32, 1.22, 1.22, 1.2,
    1.19, 1.2, 1.2, 1.16,
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

    /// Isotopes as (mass number, mass of the neutral atom in u), by mass number (AME2020).
    #[must_use]
    pub fn isotopes(self) -> &'static [(u16, f64)] {
        ISOTOPES[usize::from(self.0) - 1]
    }

    /// Mass of the isotope of a mass number in u, if it is one of [`Element::isotopes`].
    #[must_use]
    pub fn isotope_mass_u(self, mass_number: u16) -> Option<f64> {
        self.isotopes()
            .iter()
            .find_map(|&(number, mass)| (number == mass_number).then_some(mass))
    }

    /// Mass number of the most abundant isotope.
    #[must_use]
    pub fn most_abundant_isotope(self) -> u16 {
        MOST_ABUNDANT[usize::from(self.0) - 1]
    }

    /// Mass of the most abundant isotope in u: the default in vibrations, where average atomic
    /// weights have no meaning.
    #[must_use]
    pub fn mass_u(self) -> f64 {
        // every entry of MOST_ABUNDANT is in the table, which a test checks
        self.isotope_mass_u(self.most_abundant_isotope())
            .unwrap_or(f64::NAN)
    }

    /// Covalent radius in ångström (Cordero 2008), for telling which atoms are bonded.
    #[must_use]
    pub fn covalent_radius_angstrom(self) -> f64 {
        COVALENT_RADII_ANGSTROM[usize::from(self.0) - 1]
    }
}

#[cfg(test)]
mod tests {
    use super::*;

    fn of(symbol: &str) -> Element {
        Element::from_symbol(symbol).unwrap()
    }

    #[test]
    fn symbols_and_numbers_round_trip() {
        assert_eq!(Element::all().count(), 36);
        for element in Element::all() {
            assert_eq!(Element::from_symbol(element.symbol()), Some(element));
            assert_eq!(
                Element::from_atomic_number(element.atomic_number()),
                Some(element)
            );
        }
        assert_eq!(of("bR").atomic_number(), 35);
        assert_eq!(Element::from_symbol("Xx"), None);
        assert_eq!(Element::from_atomic_number(0), None);
        assert_eq!(Element::from_atomic_number(37), None);
    }

    #[test]
    fn isotopes_are_in_order_and_near_their_mass_number() {
        for element in Element::all() {
            let isotopes = element.isotopes();
            assert!(isotopes.windows(2).all(|pair| pair[0].0 < pair[1].0));
            for &(number, mass) in isotopes {
                // mass excess of all these nuclides lies between −0.1 and +0.02 u
                let excess = mass - f64::from(number);
                assert!((-0.1..0.02).contains(&excess), "{element:?} {number}");
                assert!(number >= u16::from(element.atomic_number()));
            }
            assert!(element.mass_u() > 0.0, "{element:?}");
        }
    }

    /// Wang et al. 2021 (AME2020) as collected beforehand for checks; the tolerance is twice the
    /// standard uncertainty, at least 1e-9 u.
    #[test]
    fn val_masses_ame2020() {
        for (symbol, number, mass, tolerance) in [
            ("H", 1, 1.007825031898, 1e-09),
            ("H", 2, 2.014101777844, 1e-09),
            ("He", 4, 4.00260325413, 1e-09),
            ("Li", 6, 6.01512288742, 3.1e-09),
            ("Li", 7, 7.01600343426, 9e-09),
            ("Be", 9, 9.012183062, 1.64e-07),
            ("B", 10, 10.012936862, 3.2e-08),
            ("B", 11, 11.009305166, 2.6e-08),
            ("C", 12, 12.0, 1e-09),
            ("C", 13, 13.00335483534, 1e-09),
            ("N", 14, 14.00307400425, 1e-09),
            ("N", 15, 15.00010889827, 1.24e-09),
            ("O", 16, 15.99491461926, 1e-09),
            ("O", 17, 16.99913175595, 1.38e-09),
            ("O", 18, 17.99915961214, 1.38e-09),
            ("F", 19, 18.99840316207, 1.76e-09),
            ("Ne", 20, 19.99244017525, 3.3e-09),
            ("Na", 23, 22.98976928195, 3.88e-09),
            ("Mg", 24, 23.985041689, 2.6e-08),
            ("Al", 27, 26.981538408, 1e-07),
            ("Si", 28, 27.97692653442, 1.1e-09),
            ("P", 31, 30.97376199768, 1.6e-09),
            ("S", 32, 31.97207117354, 2.82e-09),
            ("Cl", 35, 34.968852694, 7.6e-08),
            ("Cl", 37, 36.965902573, 1.1e-07),
            ("Ar", 40, 39.96238312204, 4.68e-09),
            ("K", 39, 38.96370648482, 9.78e-09),
            ("Ca", 40, 39.96259085, 4.4e-08),
            ("Br", 79, 78.918337574, 2.148e-06),
            ("Br", 81, 80.916288197, 2.098e-06),
        ] {
            let found = of(symbol).isotope_mass_u(number).unwrap();
            assert!(
                (found - mass).abs() <= tolerance,
                "{symbol}-{number}: {found}"
            );
        }
        for (symbol, number) in [
            ("H", 1),
            ("O", 16),
            ("Cl", 35),
            ("Ni", 58),
            ("Se", 80),
            ("Br", 79),
        ] {
            assert_eq!(of(symbol).most_abundant_isotope(), number);
        }
    }

    #[test]
    fn val_covalent_radii_cordero() {
        // Cordero et al. 2008, table 2 (from memory)
        for (symbol, radius) in [
            ("H", 0.31),
            ("C", 0.76),
            ("N", 0.71),
            ("O", 0.66),
            ("F", 0.57),
            ("S", 1.05),
        ] {
            assert!((of(symbol).covalent_radius_angstrom() - radius).abs() < 1e-12);
        }
    }
}

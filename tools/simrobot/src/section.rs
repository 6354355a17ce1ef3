//! One table a section of named numbers: it makes the struct, its defaults, its bounds and its meanings.

/// Defines a section: a struct with one public `f64` a key, and the table of its keys.
macro_rules! section {
    (
        $(#[$about:meta])*
        pub struct $name:ident {
            $($field:ident: $unit:literal, $default:expr, $bound:expr, $meaning:literal;)*
        }
    ) => {
        $(#[$about])*
        #[derive(Clone, Copy, Debug, PartialEq)]
        pub struct $name {
            $(#[doc = concat!($meaning, " (", $unit, ").")] pub $field: f64,)*
        }

        impl $name {
            /// The keys of this section.
            pub const KEYS: &[trackhold_core::keys::Key] = &[
                $(trackhold_core::keys::Key::with_default(stringify!($field), $unit, $default, $bound, $meaning),)*
            ];

            /// Reads it from values; keys left out have their default.
            ///
            /// # Errors
            /// Every key that is unknown or outside its bound.
            pub fn read(
                values: &trackhold_core::keys::Values,
            ) -> Result<Self, Vec<trackhold_core::keys::Problem>> {
                let values = values.checked(Self::KEYS)?;
                Ok(Self { $($field: values.get(stringify!($field)),)* })
            }

            /// Its values by name.
            pub fn values(&self) -> trackhold_core::keys::Values {
                let mut values = trackhold_core::keys::Values::default();
                $(values.set(stringify!($field), self.$field);)*
                values
            }

            /// Checks values that did not come from a file.
            ///
            /// # Errors
            /// Every one outside its bound.
            pub fn check(&self) -> Result<(), Vec<trackhold_core::keys::Problem>> {
                Self::read(&self.values()).map(|_| ())
            }
        }

        impl Default for $name {
            fn default() -> Self {
                Self { $($field: $default,)* }
            }
        }
    };
}

pub(crate) use section;

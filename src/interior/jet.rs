//! A function of (ln density, ln temperature) carried with its first and second derivatives.
//!
//! Every thermodynamic quantity is a derivative of one free energy, so writing the free energy in
//! jets makes pressure, entropy, heat capacity and Maxwell relations consistent by construction:
//! no derivative is coded twice. Second order forward differentiation, exact to rounding.

use std::ops::{Add, Mul, Neg, Sub};

/// Value and derivatives with respect to x = ln(density) and y = ln(temperature).
#[derive(Debug, Clone, Copy, Default, PartialEq)]
pub struct Jet {
    /// Value.
    pub v: f64,
    /// d/dx.
    pub x: f64,
    /// d/dy.
    pub y: f64,
    /// d2/dx2.
    pub xx: f64,
    /// d2/dxdy.
    pub xy: f64,
    /// d2/dy2.
    pub yy: f64,
}

impl Jet {
    /// A constant.
    pub fn constant(v: f64) -> Self {
        Jet { v, ..Jet::default() }
    }

    /// A linear function with the given value and slopes.
    pub fn linear(v: f64, x: f64, y: f64) -> Self {
        Jet { v, x, y, ..Jet::default() }
    }

    /// The power law `v` with logarithmic slopes `a` (density) and `b` (temperature).
    pub fn power_law(v: f64, a: f64, b: f64) -> Self {
        Jet { v, x: a * v, y: b * v, xx: a * a * v, xy: a * b * v, yy: b * b * v }
    }

    /// Outer function given by its value and first two derivatives at `self.v`.
    pub fn apply(self, f: f64, df: f64, ddf: f64) -> Self {
        Jet {
            v: f,
            x: df * self.x,
            y: df * self.y,
            xx: df * self.xx + ddf * self.x * self.x,
            xy: df * self.xy + ddf * self.x * self.y,
            yy: df * self.yy + ddf * self.y * self.y,
        }
    }

    /// exp.
    pub fn exp(self) -> Self {
        let e = self.v.exp();
        self.apply(e, e, e)
    }

    /// Natural logarithm.
    pub fn ln(self) -> Self {
        self.apply(self.v.ln(), 1.0 / self.v, -1.0 / (self.v * self.v))
    }

    /// Square root.
    pub fn sqrt(self) -> Self {
        let s = self.v.sqrt();
        self.apply(s, 0.5 / s, -0.25 / (s * self.v))
    }

    /// Arc tangent.
    pub fn atan(self) -> Self {
        let d = 1.0 / (1.0 + self.v * self.v);
        self.apply(self.v.atan(), d, -2.0 * self.v * d * d)
    }

    /// 1 / self.
    pub fn recip(self) -> Self {
        let r = 1.0 / self.v;
        self.apply(r, -r * r, 2.0 * r * r * r)
    }

    /// Integer power.
    pub fn powi(self, n: i32) -> Self {
        let k = f64::from(n);
        self.apply(self.v.powi(n), k * self.v.powi(n - 1), k * (k - 1.0) * self.v.powi(n - 2))
    }
}

impl Add for Jet {
    type Output = Jet;
    fn add(self, o: Jet) -> Jet {
        Jet {
            v: self.v + o.v,
            x: self.x + o.x,
            y: self.y + o.y,
            xx: self.xx + o.xx,
            xy: self.xy + o.xy,
            yy: self.yy + o.yy,
        }
    }
}

impl Add<f64> for Jet {
    type Output = Jet;
    fn add(self, o: f64) -> Jet {
        Jet { v: self.v + o, ..self }
    }
}

impl Sub for Jet {
    type Output = Jet;
    fn sub(self, o: Jet) -> Jet {
        self + (-o)
    }
}

impl Neg for Jet {
    type Output = Jet;
    fn neg(self) -> Jet {
        self * -1.0
    }
}

impl Mul<f64> for Jet {
    type Output = Jet;
    fn mul(self, k: f64) -> Jet {
        Jet { v: self.v * k, x: self.x * k, y: self.y * k, xx: self.xx * k, xy: self.xy * k, yy: self.yy * k }
    }
}

impl Mul for Jet {
    type Output = Jet;
    fn mul(self, o: Jet) -> Jet {
        Jet {
            v: self.v * o.v,
            x: self.x * o.v + self.v * o.x,
            y: self.y * o.v + self.v * o.y,
            xx: self.xx * o.v + 2.0 * self.x * o.x + self.v * o.xx,
            xy: self.xy * o.v + self.x * o.y + self.y * o.x + self.v * o.xy,
            yy: self.yy * o.v + 2.0 * self.y * o.y + self.v * o.yy,
        }
    }
}

#[cfg(test)]
mod tests {
    use super::Jet;

    /// A composite of every operation against central differences: the algebra, not the physics.
    #[test]
    fn derivatives_agree_with_differences() {
        let f = |x: f64, y: f64| {
            let a = Jet::power_law((0.3 * x - 0.7 * y).exp(), 0.3, -0.7);
            let b = Jet::linear(x + 2.0 * y, 1.0, 2.0);
            (a.sqrt().atan() * b + a.ln().powi(2) * 0.1 - (a + 1.0).recip()).exp()
        };
        let (x, y, h) = (0.4, 0.2, 1e-4);
        let j = f(x, y);
        assert!((j.x - (f(x + h, y).v - f(x - h, y).v) / (2.0 * h)).abs() < 1e-6);
        assert!((j.y - (f(x, y + h).v - f(x, y - h).v) / (2.0 * h)).abs() < 1e-6);
        assert!((j.xx - (f(x + h, y).x - f(x - h, y).x) / (2.0 * h)).abs() < 1e-6);
        assert!((j.xy - (f(x, y + h).x - f(x, y - h).x) / (2.0 * h)).abs() < 1e-6);
        assert!((j.yy - (f(x, y + h).y - f(x, y - h).y) / (2.0 * h)).abs() < 1e-6);
    }
}

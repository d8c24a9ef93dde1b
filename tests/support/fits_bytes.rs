//! A writer of FITS bytes, written from the standard and independent of the program's reader, so that
//! tests can also write what no library would.

/// A file under construction.
#[derive(Debug, Clone, Default)]
pub struct FitsBytes {
    bytes: Vec<u8>,
}

/// Values of one column, row after row; `per_cell` values per row.
#[derive(Debug, Clone)]
pub struct Column {
    name: String,
    unit: Option<String>,
    per_cell: usize,
    values: Values,
}

#[derive(Debug, Clone)]
enum Values {
    F64(Vec<f64>),
    F32(Vec<f32>),
    I32(Vec<i32>),
    Text(Vec<String>),
}

impl Column {
    /// A column of doubles, one per row.
    pub fn f64(name: &str, values: &[f64]) -> Self {
        Self::new(name, Values::F64(values.to_vec()))
    }

    /// A column of floats, one per row.
    pub fn f32(name: &str, values: &[f64]) -> Self {
        Self::new(name, Values::F32(values.iter().map(|value| *value as f32).collect()))
    }

    /// A column of 32-bit integers, one per row.
    pub fn i32(name: &str, values: &[i32]) -> Self {
        Self::new(name, Values::I32(values.to_vec()))
    }

    /// A column of text, padded to the longest.
    pub fn text(name: &str, values: &[&str]) -> Self {
        Self::new(name, Values::Text(values.iter().map(|text| (*text).to_owned()).collect()))
    }

    /// The same with a unit.
    pub fn unit(mut self, unit: &str) -> Self {
        self.unit = Some(unit.to_owned());
        self
    }

    /// The same with this many values in each row.
    pub fn per_cell(mut self, per_cell: usize) -> Self {
        self.per_cell = per_cell;
        self
    }

    fn new(name: &str, values: Values) -> Self {
        Column { name: name.to_owned(), unit: None, per_cell: 1, values }
    }

    fn rows(&self) -> usize {
        let values = match &self.values {
            Values::F64(values) => values.len(),
            Values::F32(values) => values.len(),
            Values::I32(values) => values.len(),
            Values::Text(values) => values.len(),
        };
        values / self.per_cell
    }

    fn text_width(&self) -> usize {
        match &self.values {
            Values::Text(values) => values.iter().map(String::len).max().unwrap_or(1).max(1),
            _ => 0,
        }
    }

    fn form(&self) -> String {
        match &self.values {
            Values::F64(_) => format!("{}D", self.per_cell),
            Values::F32(_) => format!("{}E", self.per_cell),
            Values::I32(_) => format!("{}J", self.per_cell),
            Values::Text(_) => format!("{}A", self.text_width()),
        }
    }

    fn cell_bytes(&self) -> usize {
        match &self.values {
            Values::F64(_) => 8 * self.per_cell,
            Values::F32(_) | Values::I32(_) => 4 * self.per_cell,
            Values::Text(_) => self.text_width(),
        }
    }

    fn cell(&self, row: usize) -> Vec<u8> {
        let range = row * self.per_cell..(row + 1) * self.per_cell;
        match &self.values {
            Values::F64(values) => values[range].iter().flat_map(|value| value.to_be_bytes()).collect(),
            Values::F32(values) => values[range].iter().flat_map(|value| value.to_be_bytes()).collect(),
            Values::I32(values) => values[range].iter().flat_map(|value| value.to_be_bytes()).collect(),
            Values::Text(values) => format!("{:width$}", values[row], width = self.text_width()).into_bytes(),
        }
    }
}

impl FitsBytes {
    /// Starts with a primary unit without data. Cards are written as given, e.g. `OBJECT  = 'X'`.
    pub fn empty_primary(cards: &[&str]) -> Self {
        let mut fits = FitsBytes::default();
        let mandatory = [
            "SIMPLE  =                    T",
            "BITPIX  =                    8",
            "NAXIS   =                    0",
        ];
        fits.header(&mandatory.map(str::to_owned), cards);
        fits
    }

    /// Starts with a primary image of doubles; `axes` has the fastest first.
    pub fn image(cards: &[&str], axes: &[usize], pixels: &[f64]) -> Self {
        let mut fits = FitsBytes::default();
        fits.add_image_header("SIMPLE  =                    T", cards, axes);
        fits.data(pixels.iter().flat_map(|pixel| pixel.to_be_bytes()).collect(), 0);
        fits
    }

    /// Adds an image extension of doubles.
    pub fn and_image(mut self, cards: &[&str], axes: &[usize], pixels: &[f64]) -> Self {
        self.add_image_header("XTENSION= 'IMAGE   '", cards, axes);
        self.data(pixels.iter().flat_map(|pixel| pixel.to_be_bytes()).collect(), 0);
        self
    }

    /// Adds a binary table.
    pub fn and_table(mut self, cards: &[&str], columns: &[Column]) -> Self {
        let rows = columns.first().map_or(0, Column::rows);
        let row_bytes: usize = columns.iter().map(Column::cell_bytes).sum();
        let mut mandatory = vec![
            "XTENSION= 'BINTABLE'".to_owned(),
            "BITPIX  =                    8".to_owned(),
            "NAXIS   =                    2".to_owned(),
            format!("NAXIS1  = {row_bytes:>20}"),
            format!("NAXIS2  = {rows:>20}"),
            "PCOUNT  =                    0".to_owned(),
            "GCOUNT  =                    1".to_owned(),
            format!("TFIELDS = {:>20}", columns.len()),
        ];
        for (index, column) in columns.iter().enumerate() {
            let number = index + 1;
            mandatory.push(format!("{:8}= '{}'", format!("TTYPE{number}"), column.name));
            mandatory.push(format!("{:8}= '{}'", format!("TFORM{number}"), column.form()));
            if let Some(unit) = &column.unit {
                mandatory.push(format!("{:8}= '{unit}'", format!("TUNIT{number}")));
            }
        }
        self.header(&mandatory, cards);
        let data =
            (0..rows).flat_map(|row| columns.iter().flat_map(move |column| column.cell(row))).collect();
        self.data(data, 0);
        self
    }

    /// The bytes.
    pub fn bytes(&self) -> Vec<u8> {
        self.bytes.clone()
    }

    fn add_image_header(&mut self, first: &str, cards: &[&str], axes: &[usize]) {
        let mut mandatory = vec![
            first.to_owned(),
            "BITPIX  =                  -64".to_owned(),
            format!("NAXIS   = {:>20}", axes.len()),
        ];
        for (index, length) in axes.iter().enumerate() {
            mandatory.push(format!("{:8}= {length:>20}", format!("NAXIS{}", index + 1)));
        }
        if first.starts_with("XTENSION") {
            mandatory.push("PCOUNT  =                    0".to_owned());
            mandatory.push("GCOUNT  =                    1".to_owned());
        }
        self.header(&mandatory, cards);
    }

    fn header(&mut self, mandatory: &[String], cards: &[&str]) {
        let mut header = Vec::new();
        let all = mandatory.iter().map(String::as_str).chain(cards.iter().copied()).chain(["END"]);
        for card in all {
            assert!(card.len() <= 80, "card too long: {card}");
            header.extend_from_slice(format!("{card:80}").as_bytes());
        }
        self.data(header, b' ');
    }

    fn data(&mut self, mut data: Vec<u8>, padding: u8) {
        data.resize(data.len().next_multiple_of(2880), padding);
        self.bytes.extend_from_slice(&data);
    }
}

/// Packs bytes with gzip.
pub fn gzip(bytes: &[u8]) -> Vec<u8> {
    use std::io::Write;
    let mut packer = flate2::write::GzEncoder::new(Vec::new(), flate2::Compression::fast());
    packer.write_all(bytes).expect("memory");
    packer.finish().expect("memory")
}

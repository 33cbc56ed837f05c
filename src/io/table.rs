//! Result tables: a units line, a header, rows; comma separated.

use std::fs;
use std::io::{self, Write};
use std::path::Path;

use super::error::IoError;
use super::output::write_whole;

/// One cell of a table.
#[derive(Debug, Clone, PartialEq)]
pub enum Value {
    /// Not computed or not applicable: an empty field, never zero.
    Empty,
    /// A whole number.
    Int(i64),
    /// A number, written so that it reads back the same; NaN and infinite values are written as empty.
    Real(f64),
    /// Text.
    Text(String),
}

/// A table with units.
#[derive(Debug, Clone, PartialEq, Default)]
pub struct Table {
    columns: Vec<String>,
    units: Vec<(String, String)>,
    rows: Vec<Vec<Value>>,
}

impl Table {
    /// Empty table; `units` are pairs of column and unit.
    pub fn new(columns: &[&str], units: Vec<(String, String)>) -> Self {
        Self { columns: columns.iter().map(|&c| c.to_owned()).collect(), units, rows: Vec::new() }
    }

    /// Adds a row; missing cells are empty, surplus ones are dropped.
    pub fn push(&mut self, mut row: Vec<Value>) {
        row.resize(self.columns.len(), Value::Empty);
        self.rows.push(row);
    }

    /// Column names.
    pub fn columns(&self) -> &[String] {
        &self.columns
    }

    /// Unit of a column, if it has one.
    pub fn unit(&self, column: &str) -> Option<&str> {
        self.units.iter().find(|(c, _)| c == column).map(|(_, u)| u.as_str())
    }

    /// Rows.
    pub fn rows(&self) -> &[Vec<Value>] {
        &self.rows
    }

    /// Numbers of a column, NaN for empty cells; `None` for an unknown column or one with text.
    pub fn column(&self, name: &str) -> Option<Vec<f64>> {
        let k = self.columns.iter().position(|c| c == name)?;
        self.rows
            .iter()
            .map(|row| match &row[k] {
                Value::Empty => Some(f64::NAN),
                Value::Int(i) => Some(*i as f64),
                Value::Real(r) => Some(*r),
                Value::Text(_) => None,
            })
            .collect()
    }

    /// Writes the table: `# units: x=mm, ...`, header, rows.
    ///
    /// # Errors
    /// What the writer returns.
    pub fn write(&self, out: &mut dyn Write) -> io::Result<()> {
        let units: Vec<String> = self.units.iter().map(|(c, u)| format!("{c}={}", one_line(u))).collect();
        writeln!(out, "# units: {}", units.join(", "))?;
        let mut writer = csv::WriterBuilder::new().from_writer(out);
        writer.write_record(&self.columns)?;
        let mut cells: Vec<String> = Vec::with_capacity(self.columns.len());
        for row in &self.rows {
            cells.clear();
            cells.extend(row.iter().map(|value| match value {
                Value::Real(r) if r.is_finite() => format!("{r:?}"),
                Value::Empty | Value::Real(_) => String::new(),
                Value::Int(i) => i.to_string(),
                // Readers that know comments take everything behind # for one.
                Value::Text(t) => one_line(t).replace('#', "no."),
            }));
            writer.write_record(&cells)?;
        }
        writer.flush()
    }

    /// Writes the table to a file.
    ///
    /// # Errors
    /// [`IoError::System`].
    pub fn save(&self, path: &Path) -> Result<(), IoError> {
        write_whole(path, |w| self.write(w))
    }

    /// Reads a table written by [`Self::save`].
    ///
    /// # Errors
    /// [`IoError`] for a file that cannot be read or is not such a table.
    pub fn read(path: &Path) -> Result<Self, IoError> {
        let text = fs::read_to_string(path).map_err(|e| IoError::system("read", path, e))?;
        let units = text
            .lines()
            .next()
            .and_then(|l| l.strip_prefix("# units: "))
            .ok_or_else(|| IoError::content(path, "line 1", "expected `# units: ...`"))?
            .split(", ")
            .filter_map(|pair| pair.split_once('=').map(|(c, u)| (c.to_owned(), u.to_owned())))
            .collect();
        let mut reader = csv::ReaderBuilder::new().comment(Some(b'#')).from_reader(text.as_bytes());
        let bad = |e: csv::Error| IoError::content(path, "table", e.to_string());
        let columns = reader.headers().map_err(bad)?.iter().map(str::to_owned).collect();
        let mut table = Self { columns, units, rows: Vec::new() };
        for record in reader.records() {
            let row = record
                .map_err(bad)?
                .iter()
                .map(|cell| {
                    if cell.is_empty() {
                        Value::Empty
                    } else if let Ok(i) = cell.parse() {
                        Value::Int(i)
                    } else if let Ok(r) = cell.parse() {
                        Value::Real(r)
                    } else {
                        Value::Text(cell.to_owned())
                    }
                })
                .collect();
            table.rows.push(row);
        }
        Ok(table)
    }
}

fn one_line(text: &str) -> String {
    text.replace(['\n', '\r'], " ")
}

#[cfg(test)]
mod tests {
    use super::*;

    #[test]
    fn a_table_reads_back_as_it_was_written() {
        let folder = tempfile::tempdir().unwrap();
        let path = folder.path().join("t.csv");
        let mut table = Table::new(&["frame", "x", "kind", "sigma"], vec![("x".into(), "mm".into())]);
        table.push(vec![Value::Int(3), Value::Real(0.1 + 0.2), Value::Text("a, \"b\"".into()), Value::Empty]);
        table.push(vec![Value::Int(4), Value::Real(1e-300), Value::Text("c".into()), Value::Real(2.5)]);
        table.save(&path).unwrap();
        assert_eq!(Table::read(&path).unwrap(), table);
        assert!(fs::read_to_string(&path).unwrap().starts_with("# units: x=mm\nframe,x,kind,sigma\n"));
        assert!(table.column("sigma").unwrap()[0].is_nan());
    }

    #[test]
    fn missing_numbers_are_empty_and_text_cannot_start_a_comment() {
        let mut out = Vec::new();
        let mut table = Table::new(&["a", "b"], Vec::new());
        table.push(vec![Value::Real(f64::NAN), Value::Text("#x\ny".into())]);
        table.write(&mut out).unwrap();
        assert!(String::from_utf8(out).unwrap().ends_with("a,b\n,no.x y\n"));
    }
}

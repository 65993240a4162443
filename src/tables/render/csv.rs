//! Tables as CSV, exact.

use crate::tables::{Cell, Table};

impl Table {
    /// Returns the table as CSV: a row of column names, then exact numbers; shares are of one.
    pub fn to_csv(&self) -> String {
        let mut writer = csv::Writer::from_writer(Vec::new());
        // Writing to memory cannot fail, and rows are as long as the columns.
        writer
            .write_record(self.columns.iter().map(|column| column.name))
            .expect("memory takes the row");
        for row in &self.rows {
            writer.write_record(row.iter().map(Cell::exact)).expect("memory takes the row");
        }
        let bytes = writer.into_inner().expect("memory takes the rows");
        String::from_utf8(bytes).expect("cells are text")
    }
}

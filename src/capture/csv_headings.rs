//! Names and units of the columns, from the lines above the rows.

use super::cells::{Heading, is_unit, read_heading};
use super::csv_lines::Line;
use super::csv_sniff::{place_of, tally_cell};
use super::error::CaptureError;
use super::options::LayoutOptions;
use super::stamps::StampFormat;

/// A heading for each column, and the line that the names are from.
type Headings = (Vec<Heading>, Option<u64>);

/// Names and units from the lines before the data, and the line of the names.
pub(super) fn headings(before: &[Line], width: usize) -> Headings {
    let mut rows = before
        .iter()
        .rev()
        .map(|line| (line.number, header_cells(line, width)))
        .skip_while(|(_, cells)| cells.iter().all(|cell| cell.is_empty()));
    let fits = |(_, cells): &(u64, Vec<Vec<u8>>)| {
        // A trailing delimiter may be in the header or in the rows only.
        let filled = cells.iter().filter(|cell| !cell.is_empty()).count();
        let numbers = cells.iter().filter(|cell| tally_cell(cell).0 > 0).count();
        cells.len().abs_diff(width) <= 1 && 2 * numbers <= filled && (width == 1 || filled > 1)
    };
    let mut names = rows.next().filter(fits);
    let mut units = None;
    if names
        .as_ref()
        .is_some_and(|(_, cells)| cells.iter().all(|cell| is_unit_cell(cell)))
    {
        // A row of units only, if there are names above it.
        if let Some(above) = rows.next().filter(fits) {
            units = names.replace(above);
        }
    }
    let line = names.as_ref().map(|(line, _)| *line);
    let cells = |row: Option<(u64, Vec<Vec<u8>>)>| row.map(|(_, cells)| cells);
    (read_headings(&cells(names), &cells(units), width), line)
}

fn read_headings(
    names: &Option<Vec<Vec<u8>>>,
    units: &Option<Vec<Vec<u8>>>,
    width: usize,
) -> Vec<Heading> {
    let cell = |row: &Option<Vec<Vec<u8>>>, column| {
        let cell = row.as_ref().and_then(|row| row.get(column));
        cell.cloned().unwrap_or_default()
    };
    (0..width)
        .map(|column| {
            let mut heading = read_heading(&cell(names, column));
            let unit = read_heading(&cell(units, column));
            let unit = unit.unit.unwrap_or(unit.name);
            if !unit.is_empty() {
                heading.unit = Some(unit.trim_matches(['[', ']', '(', ')']).into());
            }
            heading
        })
        .collect()
}

/// The cells of a line before the data, without the mark of a remark.
fn header_cells(line: &Line, width: usize) -> Vec<Vec<u8>> {
    let mut cells: Vec<Vec<u8>> = line
        .cells
        .iter()
        .map(|cell| super::cells::trim(cell).to_vec())
        .collect();
    if line.remark {
        if let Some(first) = cells.first_mut() {
            let marks = first.iter().take_while(|c| b"#%/; \t".contains(c)).count();
            first.drain(..marks);
        }
        // A mark set off by the delimiter is no cell.
        if cells.len() > width && cells.first().is_some_and(Vec::is_empty) {
            cells.remove(0);
        }
    }
    cells
}

fn is_unit_cell(cell: &[u8]) -> bool {
    let text = super::text::to_text(cell);
    let bare = text.trim().trim_matches(['[', ']', '(', ')']);
    bare.is_empty()
        || bare == "-"
        || bare.len() < text.trim().len()
        || is_unit(bare)
        || StampFormat::from_unit(bare).is_some()
}

/// Names and units from the lines that the user names, and the line of names.
pub(super) fn given_headings(
    records: &[Line],
    lines: usize,
    width: usize,
    layout: &LayoutOptions,
) -> Result<Option<Headings>, CaptureError> {
    let cells_of = |line: Option<u64>, option| -> Result<_, CaptureError> {
        match line {
            None | Some(0) => Ok(None),
            Some(line) => {
                let record = records.get(place_of(records, lines, line, option)?);
                Ok(record.map(|record| header_cells(record, width)))
            }
        }
    };
    let names = cells_of(layout.names_line, "names-line")?;
    let units = cells_of(layout.units_line, "units-line")?;
    if layout.names_line.is_none() && units.is_none() {
        return Ok(None);
    }
    let line = layout.names_line.filter(|&line| line > 0);
    Ok(Some((read_headings(&names, &units, width), line)))
}

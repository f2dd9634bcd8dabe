//! VOTable 1.4 (IVOA Recommendation 2019-10-21), TABLEDATA serialisation. The namespace of 1.4 is that of 1.3, as the
//! recommendation says.

use super::sources::{Cell, SOURCE_COLUMNS, SourceColumn};
use crate::measure::Source;
use std::fmt::Write;

/// The source list as a VOTable document.
pub fn votable(sources: &[Source], title: &str) -> String {
    let mut xml = String::from(
        "<?xml version=\"1.0\" encoding=\"UTF-8\"?>\n<VOTABLE version=\"1.4\" \
         xmlns=\"http://www.ivoa.net/xml/VOTable/v1.3\" xmlns:xsi=\"http://www.w3.org/2001/XMLSchema-instance\">\n \
         <RESOURCE type=\"results\">\n  <COOSYS ID=\"icrs\" system=\"ICRS\"/>\n",
    );
    let mut line = |text: &str| {
        xml.push_str(text);
        xml.push('\n');
    };
    line("  <TABLE name=\"sources\">");
    line(&format!(
        "   <DESCRIPTION>{}</DESCRIPTION>",
        escaped(&format!("Sources of {title}, measured by evensky {}", env!("CARGO_PKG_VERSION")))
    ));
    let example = Source::at("", crate::sky::Direction { ra: 0.0, dec: 0.0 }, 0.0);
    for column in &SOURCE_COLUMNS {
        line(&field(column, &(column.cell)(&example)));
    }
    line("   <DATA>\n    <TABLEDATA>");
    for source in sources {
        let mut row = String::from("     <TR>");
        for column in &SOURCE_COLUMNS {
            let cell = match (column.cell)(source) {
                Cell::Text(text) => escaped(&text),
                // an empty cell of a floating-point column is a NaN, by the recommendation
                Cell::Number(value) => value.filter(|v| v.is_finite()).map_or(String::new(), |v| v.to_string()),
                Cell::Count(count) => count.to_string(),
            };
            // writing to a string cannot fail
            let _ = write!(row, "<TD>{cell}</TD>");
        }
        line(&(row + "</TR>"));
    }
    line("    </TABLEDATA>\n   </DATA>\n  </TABLE>\n </RESOURCE>\n</VOTABLE>");
    xml
}

fn field(column: &SourceColumn, cell: &Cell) -> String {
    let kind = match cell {
        Cell::Text(_) => "datatype=\"unicodeChar\" arraysize=\"*\"",
        Cell::Number(_) => "datatype=\"double\"",
        Cell::Count(_) => "datatype=\"int\"",
    };
    let unit = if column.unit.is_empty() { String::new() } else { format!(" unit=\"{}\"", column.unit) };
    let frame = if column.ucd.starts_with("pos.eq") { " ref=\"icrs\"" } else { "" };
    format!(
        "   <FIELD name=\"{}\" {kind}{unit} ucd=\"{}\"{frame}><DESCRIPTION>{}</DESCRIPTION></FIELD>",
        column.name,
        column.ucd,
        escaped(column.what)
    )
}

/// Text that cannot become markup; characters that XML 1.0 forbids become U+FFFD.
fn escaped(text: &str) -> String {
    text.chars().fold(String::new(), |mut out, letter| {
        match letter {
            '&' => out.push_str("&amp;"),
            '<' => out.push_str("&lt;"),
            '>' => out.push_str("&gt;"),
            '"' => out.push_str("&quot;"),
            '\t' | '\n' | '\r' => out.push(letter),
            c if (c as u32) < 0x20 || matches!(c, '\u{fffe}' | '\u{ffff}') => out.push('\u{fffd}'),
            c => out.push(c),
        }
        out
    })
}

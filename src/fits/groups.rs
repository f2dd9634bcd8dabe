//! The layout of random groups (FITS Standard 4.0, §6).

use super::big_endian::NumberKind;
use super::{FitsProblem, Hdu, HduKind};

/// One parameter of a group: physical = stored · scale + zero.
#[derive(Debug, Clone, PartialEq)]
pub struct GroupParameter {
    /// PTYPE, without trailing blanks. Parameters of one name are to be added.
    pub name: String,
    /// PSCAL.
    pub scale: f64,
    /// PZERO.
    pub zero: f64,
}

/// The layout of all groups: parameters, then the array, in each.
#[derive(Debug, Clone)]
pub struct Groups {
    /// Kind of every number.
    pub number: NumberKind,
    /// Parameters in order.
    pub parameters: Vec<GroupParameter>,
    /// Lengths of the array's axes NAXIS2, NAXIS3, …, first fastest.
    pub axes: Vec<usize>,
    /// Bytes of one group.
    pub group_bytes: usize,
    /// Number of groups, GCOUNT.
    pub count: u64,
    /// Where the first group begins in the file.
    pub start: u64,
}

impl Groups {
    /// The layout of the random groups that `hdu` describes.
    ///
    /// # Errors
    /// When it holds none, a PTYPEn is missing or one too many, or a scale is zero.
    pub fn new(hdu: &Hdu) -> Result<Groups, FitsProblem> {
        let header = &hdu.header;
        if hdu.kind != HduKind::Groups {
            return Err(header.complain("GROUPS", "T, with NAXIS1 = 0"));
        }
        // Without this a wrong PCOUNT would shift every group and still fit the file.
        if hdu.pcount > 999 {
            return Err(header.complain("PCOUNT", "at most 999"));
        }
        let beyond = format!("PTYPE{}", hdu.pcount + 1);
        if header.get(&beyond).is_some() {
            return Err(
                header.complain("PCOUNT", &format!("the number of PTYPEn keywords; {beyond} stands there too"))
            );
        }
        let mut parameters = Vec::new();
        for n in 1..=hdu.pcount {
            let keyword = format!("PTYPE{n}");
            let name = header.text(&keyword)?.ok_or_else(|| {
                header.complain(&keyword, &format!("the name of parameter {n} of PCOUNT = {}", hdu.pcount))
            })?;
            let scale = header.float(&format!("PSCAL{n}"))?.unwrap_or(1.0);
            let zero = header.float(&format!("PZERO{n}"))?.unwrap_or(0.0);
            if scale == 0.0 {
                return Err(header.complain(&format!("PSCAL{n}"), "a scale that is not zero"));
            }
            parameters.push(GroupParameter { name, scale, zero });
        }
        let group_bytes = if hdu.gcount == 0 { 0 } else { hdu.data_bytes / hdu.gcount };
        let too_large = || header.complain("NAXIS", "a group that fits in memory");
        let axes =
            hdu.axes[1..].iter().map(|n| usize::try_from(*n).map_err(|_| too_large())).collect::<Result<_, _>>()?;
        Ok(Groups {
            number: hdu.number,
            parameters,
            axes,
            group_bytes: usize::try_from(group_bytes).map_err(|_| too_large())?,
            count: hdu.gcount,
            start: hdu.data_start,
        })
    }
}

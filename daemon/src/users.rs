//! Who is behind a user number.

/// The name of a user as the system's table of users has it, else the number.
pub(crate) fn name(user: u32) -> String {
    let table = std::fs::read_to_string("/etc/passwd").unwrap_or_default();
    in_table(&table, user).map_or_else(|| format!("user {user}"), str::to_owned)
}

/// Lines of `name:password:number:...` (passwd(5)).
fn in_table(table: &str, user: u32) -> Option<&str> {
    table.lines().find_map(|line| {
        let mut fields = line.split(':');
        let (name, number) = (fields.next()?, fields.nth(1)?);
        (number.parse() == Ok(user)).then_some(name)
    })
}

#[cfg(test)]
mod tests {
    use super::*;

    #[test]
    fn names_are_found_and_what_is_no_line_is_passed_over() {
        let table = "root:x:0:0:root:/root:/bin/sh\n\nnonsense\nanna:x:1000:1000::/home/anna:/bin/sh\n";
        assert_eq!(in_table(table, 1000), Some("anna"));
        assert_eq!(in_table(table, 0), Some("root"));
        assert_eq!(in_table(table, 7), None);
    }
}

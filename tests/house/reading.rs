//! Source text with comments, strings and tests blanked out, line for line; its paths and functions.

/// One file below `src/`.
pub struct Source {
    pub path: String,
    /// As written, for what is said in comments.
    pub written: Vec<String>,
    /// Code alone: comments, literals and `#[cfg(test)]` items are blanks.
    pub code: String,
}

/// A name that code reaches from the root of the crate, and the line where it does.
pub struct Reach {
    pub line: usize,
    pub name: String,
}

/// A function and the number of its lines.
pub struct Function {
    pub line: usize,
    pub name: String,
    pub lines: usize,
}

impl Source {
    pub fn new(path: &str, text: &str) -> Self {
        let bare = without_comments_and_literals(text);
        // A module of tests in a file of its own.
        let code = if path.ends_with("_tests.rs") { String::new() } else { without_tests(&bare) };
        Self { path: path.to_owned(), written: text.lines().map(str::to_owned).collect(), code }
    }

    /// The top-level module; `None` for `lib.rs` and `main.rs`.
    pub fn room(&self) -> Option<String> {
        self.path.split_once('/').map(|(room, _)| room.to_owned())
    }

    /// Lines up to the last one that is not a test.
    pub fn lines_without_tests(&self) -> usize {
        match self.written.iter().position(|line| line.starts_with("#[cfg(test)]")) {
            Some(tests) => tests,
            None => self.written.len(),
        }
    }

    /// Depth of the file's module below the root: `solve/mod.rs` is 1, `solve/lsqr.rs` is 2.
    fn depth(&self) -> usize {
        let parts = self.path.split('/').count();
        if self.path.ends_with("/mod.rs") { parts - 1 } else { parts }
    }

    /// Everything reached by `crate::`, `$crate::`, `ellbow::` or enough `super::`.
    pub fn reaches(&self) -> Vec<Reach> {
        let tokens = tokens(&self.code);
        let mut reaches = Vec::new();
        let mut at = 0;
        while at < tokens.len() {
            let word = tokens[at].text.as_str();
            let after_path = at > 0 && tokens[at - 1].text == "::";
            let rest = match word {
                "crate" | "ellbow" if !after_path => Some(at + 1),
                "super" if !after_path => {
                    let mut end = at;
                    let mut up = 1;
                    while tokens.get(end + 2).is_some_and(|t| t.text == "super") {
                        end += 2;
                        up += 1;
                    }
                    let skip = end + 1;
                    if up < self.depth() {
                        at = skip;
                        continue;
                    }
                    Some(skip)
                }
                _ => None,
            };
            match rest {
                Some(next) if tokens.get(next).is_some_and(|t| t.text == "::") => {
                    at = names(&tokens, next + 1, &mut reaches);
                }
                Some(next)
                    if word == "crate" && tokens.get(next).is_some_and(|t| t.text == "as") =>
                {
                    reaches.push(Reach { line: tokens[at].line, name: "renamed".into() });
                    at = next;
                }
                _ => at += 1,
            }
        }
        reaches
    }

    pub fn functions(&self) -> Vec<Function> {
        let tokens = tokens(&self.code);
        let mut functions = Vec::new();
        for at in 0..tokens.len().saturating_sub(1) {
            let name = &tokens[at + 1].text;
            let named = name.starts_with(|c: char| c.is_alphabetic() || c == '_');
            if tokens[at].text != "fn" || !named {
                continue;
            }
            // The body is the first brace outside brackets; a declaration ends at a semicolon.
            let mut depth = 0i32;
            let body = (at..tokens.len()).find(|&i| match tokens[i].text.as_str() {
                "(" | "[" => {
                    depth += 1;
                    false
                }
                ")" | "]" => {
                    depth -= 1;
                    false
                }
                "{" | ";" => depth == 0,
                _ => false,
            });
            let Some(open) = body.filter(|&i| tokens[i].text == "{") else { continue };
            let close = matching(&tokens, open);
            functions.push(Function {
                line: tokens[at].line,
                name: name.clone(),
                lines: tokens[close].line - tokens[at].line + 1,
            });
        }
        functions
    }
}

pub struct Token {
    pub line: usize,
    pub text: String,
}

/// Words, `::`, and single other characters.
pub fn tokens(code: &str) -> Vec<Token> {
    let mut tokens = Vec::new();
    for (i, line) in code.lines().enumerate() {
        let mut rest = line.trim_start();
        while let Some(first) = rest.chars().next() {
            let length = if first.is_alphanumeric() || first == '_' {
                rest.find(|c: char| !(c.is_alphanumeric() || c == '_')).unwrap_or(rest.len())
            } else if rest.starts_with("::") {
                2
            } else {
                first.len_utf8()
            };
            tokens.push(Token { line: i + 1, text: rest[..length].to_owned() });
            rest = rest[length..].trim_start();
        }
    }
    tokens
}

/// Place of the brace that closes the one at `open`.
fn matching(tokens: &[Token], open: usize) -> usize {
    let mut depth = 0i32;
    for (i, token) in tokens.iter().enumerate().skip(open) {
        match token.text.as_str() {
            "{" => depth += 1,
            "}" => depth -= 1,
            _ => {}
        }
        if depth == 0 {
            return i;
        }
    }
    tokens.len() - 1
}

/// The first names of a path or of the branches of a use tree; returns the place behind them.
fn names(tokens: &[Token], at: usize, reaches: &mut Vec<Reach>) -> usize {
    let Some(first) = tokens.get(at) else { return at };
    let mut push = |token: &Token| {
        let name = if token.text == "*" { "everything" } else { &token.text };
        reaches.push(Reach { line: token.line, name: name.to_owned() });
    };
    if first.text != "{" {
        push(first);
        return at + 1;
    }
    let close = matching(tokens, at);
    let mut depth = 0;
    for i in at..close {
        match tokens[i].text.as_str() {
            "{" => depth += 1,
            "}" => depth -= 1,
            _ if depth == 1 && matches!(tokens[i - 1].text.as_str(), "{" | ",") => push(&tokens[i]),
            _ => {}
        }
    }
    close
}

/// Blanks for comments and for what stands in literals; line breaks stay.
fn without_comments_and_literals(text: &str) -> String {
    let chars: Vec<char> = text.chars().collect();
    let mut out = String::with_capacity(text.len());
    let mut at = 0;
    while at < chars.len() {
        let rest = &chars[at..];
        let word_before = at > 0 && (chars[at - 1].is_alphanumeric() || chars[at - 1] == '_');
        let length = match rest {
            ['/', '/', ..] => rest.iter().position(|c| *c == '\n').unwrap_or(rest.len()),
            ['/', '*', ..] => block_comment(rest),
            ['"', ..] => quoted(rest, 0),
            ['r', '"' | '#', ..] if !word_before => match raw(rest) {
                0 => 0,
                length => length,
            },
            ['b', 'r', ..] if !word_before && raw(&rest[1..]) > 0 => 1 + raw(&rest[1..]),
            ['\'', '\\', ..] => 3 + rest[3..].iter().position(|c| *c == '\'').unwrap_or(0),
            ['\'', _, '\'', ..] => 3,
            _ => 0,
        };
        if length == 0 {
            out.push(chars[at]);
            at += 1;
        } else {
            out.extend(rest[..length].iter().map(|c| if *c == '\n' { '\n' } else { ' ' }));
            at += length;
        }
    }
    out
}

fn block_comment(rest: &[char]) -> usize {
    let (mut depth, mut at) = (0, 0);
    while at < rest.len() {
        match rest[at..] {
            ['/', '*', ..] => (depth, at) = (depth + 1, at + 2),
            ['*', '/', ..] => (depth, at) = (depth - 1, at + 2),
            _ => at += 1,
        }
        if depth == 0 {
            break;
        }
    }
    at
}

/// Length of a string literal that opens at `open`.
fn quoted(rest: &[char], open: usize) -> usize {
    let mut at = open + 1;
    while at < rest.len() && rest[at] != '"' {
        at += if rest[at] == '\\' { 2 } else { 1 };
    }
    (at + 1).min(rest.len())
}

/// Length of a raw string literal, 0 if it is none.
fn raw(rest: &[char]) -> usize {
    let hashes = rest[1..].iter().take_while(|c| **c == '#').count();
    if rest.get(1 + hashes) != Some(&'"') {
        return 0;
    }
    let mut at = 2 + hashes;
    while at < rest.len() {
        if rest[at] == '"'
            && rest[at + 1..].iter().take(hashes).filter(|c| **c == '#').count() == hashes
        {
            return at + 1 + hashes;
        }
        at += 1;
    }
    rest.len()
}

/// Blanks for items marked `#[cfg(test)]`.
fn without_tests(bare: &str) -> String {
    let mut out = bare.to_owned();
    while let Some(start) = out.find("#[cfg(test)]") {
        let from = &out[start..];
        let semicolon = from.find(';').unwrap_or(from.len());
        let end = match from.find('{') {
            Some(open) if open < semicolon => {
                let mut depth = 0;
                from.char_indices()
                    .skip_while(|(i, _)| *i < open)
                    .find(|(_, c)| {
                        depth += match c {
                            '{' => 1,
                            '}' => -1,
                            _ => 0,
                        };
                        depth == 0
                    })
                    .map_or(from.len(), |(i, _)| i + 1)
            }
            _ => (semicolon + 1).min(from.len()),
        };
        let blank: String =
            from[..end].chars().map(|c| if c == '\n' { '\n' } else { ' ' }).collect();
        out.replace_range(start..start + end, &blank);
    }
    out
}

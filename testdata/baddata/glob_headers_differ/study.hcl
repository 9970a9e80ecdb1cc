# Two files of one input: the second lacks a column that is read.
study { title = "glob headers differ" }

input "rows_read" {
  file    = "data/*.csv"
  columns = {
    g = text
    x = number("d")
    y = number("N")
  }
}

curve "c" {
  from     = rows_read
  response = y
  along    = x
  by       = [g]
  smoothness { rule = gcv }
}

report "page" {
  files = ["out/page.md"]
  show  = [c]
}

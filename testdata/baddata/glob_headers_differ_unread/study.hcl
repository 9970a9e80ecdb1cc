# Two files of one input differ in a column that is not read: still not the same columns.
study { title = "glob headers differ unread" }

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

study { title = "A pond over thirty hours (invented data)" }
input "pond" {
  file    = "pond.csv"
  columns = { hour = number("h"), temperature = number("°C") }
}
curve "warmth" {
  from     = pond
  response = temperature
  along    = hour
  smoothness { rule = gcv }
  reading "warmest" { maximum = true }
}
report "page" {
  files = ["out/pond.md", "out/pond.html"]
  show  = [warmth]
}

package exchange

import (
	"crypto/sha256"
	"encoding/base64"
	"html/template"
)

// pageStyle is the style of every page that this package writes for reading and
// printing: no scripts, no fonts or pictures from elsewhere, two colours.
const pageStyle = `
body { font: 0.95rem/1.4 system-ui, sans-serif; max-width: 62rem; margin: 1.5rem auto; padding: 0 1rem; color: #1a1a1a; background: #fff }
h1 { font-size: 1.4rem; margin: 0 0 .3rem } h2 { font-size: 1.05rem; margin: 1.2rem 0 .3rem }
.value { font-size: 1.5rem; margin: .2rem 0 }
p { margin: .3rem 0 } .quiet { color: #4a4a4a } a { color: #0b4a6f }
table { border-collapse: collapse; width: 100%; margin: .3rem 0 } caption { text-align: left; font-weight: 600; padding: .2rem 0 }
th, td { text-align: left; vertical-align: top; padding: .2rem .5rem .2rem 0; border-bottom: 1px solid #bbb } thead th { border-bottom: 2px solid #444 }
.number { text-align: right; white-space: nowrap; font-variant-numeric: tabular-nums }
ul { margin: .2rem 0; padding-left: 1.2rem } code { font-size: .85em; overflow-wrap: anywhere } .missing { font-weight: 600 }
.notice { border-left: .3rem solid #8a5a00; padding: .2rem .6rem }
.chain { list-style: none; padding: 0; margin: .3rem 0 } .chain li { border-bottom: 1px solid #bbb; padding: .25rem 0; overflow-wrap: anywhere } .no { font-variant-numeric: tabular-nums; font-weight: 600 } .delta { white-space: nowrap }
@media screen and (min-width: 52rem) { .chain li { display: grid; grid-template-columns: 2rem minmax(0, 1fr) 10.5rem 20rem; column-gap: .6rem } }
.ink { display: none }
@page { size: A4; margin: 8mm 9mm }
@media print {
 body { font-size: 7.4pt; line-height: 1.22; margin: 0; padding: 0; max-width: none } h1 { font-size: 11pt; margin: 0 } .value { font-size: 11pt; margin: .3mm 0 } h2 { font-size: 9pt; margin: 1mm 0 .3mm }
 p { margin: .3mm 0 } body > main > ul { font-size: 6.6pt } th, td { padding: .35mm 1.5mm .35mm 0; border-bottom-width: .4pt } a { color: inherit; text-decoration: none } tr, li { break-inside: avoid }
 .chain { columns: 2; column-gap: 4mm; font-size: 5.9pt; line-height: 1.14 } ul { columns: 2; column-gap: 4mm } .chain li { padding: .3mm 0; border-bottom-width: .3pt } .screen { display: none } .ink { display: inline }
}
`

// PageStyleHash is the Content-Security-Policy source of the pages' style.
func PageStyleHash() string {
	sum := sha256.Sum256([]byte(pageStyle))
	return "'sha256-" + base64.StdEncoding.EncodeToString(sum[:]) + "'"
}

// pageHead begins every page; its dot is the title.
const pageHead = `{{define "head"}}<!DOCTYPE html>
<html lang="en">
<head>
<meta charset="utf-8">
<meta name="viewport" content="width=device-width, initial-scale=1">
<title>{{.}}</title>
<style>{{style}}</style>
</head>
<body>
<main>
{{end}}{{define "foot"}}</main>
</body>
</html>
{{end}}`

// newPage makes a page's template.
func newPage(name, text string) *template.Template {
	return template.Must(template.New(name).Funcs(template.FuncMap{
		"style": func() template.CSS { return template.CSS(pageStyle) },
		"plus":  func(a, b int) int { return a + b },
	}).Parse(pageHead + text))
}

package rest

import (
	"embed"
	"encoding/json"
	"fmt"
	"mime"
	"net/http"
	"path"
	"sync"

	"github.com/danielgtaylor/huma/v2"
	"github.com/labstack/echo/v4"

	"deltamoor/api/registry"
)

// The page that shows the description comes from here, and nothing of it from
// anywhere else. docs/NOTICE.txt says whose the viewer is.
//
//go:embed docs
var docsFiles embed.FS

// docsPolicy lets the viewer set styles and draw its own icons, and reach
// nothing but this server.
const docsPolicy = "default-src 'self'; style-src 'self' 'unsafe-inline'; img-src 'self' data:; frame-ancestors 'none'; base-uri 'none'; form-action 'none'"

// mountDocs serves the description and the page that shows it. The texts are
// made when they are first asked for, since most starts need neither.
func mountDocs(e *echo.Echo, api *huma.OpenAPI) error {
	asJSON := sync.OnceValues(func() ([]byte, error) { return json.MarshalIndent(api, "", "  ") })
	asYAML := sync.OnceValues(api.YAML)
	for address, text := range map[string]func() ([]byte, error){"/openapi.json": asJSON, "/openapi.yaml": asYAML} {
		media := "application/openapi+" + path.Ext(address)[1:]
		e.GET(address, func(c echo.Context) error {
			b, err := text()
			if err != nil {
				return fmt.Errorf("write the API description: %w", err)
			}
			return c.Blob(http.StatusOK, media, b)
		})
	}

	entries, err := docsFiles.ReadDir("docs")
	if err != nil {
		return fmt.Errorf("read the files of /docs: %w", err)
	}
	for _, entry := range entries {
		content, err := docsFiles.ReadFile("docs/" + entry.Name())
		if err != nil {
			return fmt.Errorf("read the files of /docs: %w", err)
		}
		address, media := "/docs/"+entry.Name(), mime.TypeByExtension(path.Ext(entry.Name()))
		switch path.Ext(entry.Name()) {
		case ".html":
			address = "/docs"
		case ".txt": // not among the types that every system knows
			media = "text/plain; charset=utf-8"
		}
		e.GET(address, func(c echo.Context) error {
			c.Response().Header().Set("Content-Security-Policy", docsPolicy)
			c.Response().Header().Set("Cache-Control", "public, max-age=3600")
			return c.Blob(http.StatusOK, media, content)
		})
	}
	e.GET("/problems/:meaning", func(c echo.Context) error {
		for _, k := range problemKinds {
			if string(k.Meaning) == c.Param("meaning") {
				return c.String(http.StatusOK, fmt.Sprintf("%s (status %d)\n\n%s\n", k.Title, k.Status, k.About))
			}
		}
		return registry.Refuse(registry.NotFound, "no problem %q", c.Param("meaning"))
	})
	return nil
}

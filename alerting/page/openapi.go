package page

import (
	_ "embed" // for the description
	"net/http"
)

// openAPI describes every address for programs: OpenAPI 3.1. What the program
// answers is held against it by the tests of deploy/api.
//
//go:embed openapi.json
var openAPI []byte

// description answers with openAPI.
func (p *Page) description(w http.ResponseWriter, _ *http.Request) {
	p.write(w, http.StatusOK, "application/json", openAPI)
}

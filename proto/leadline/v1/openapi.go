// Package leadlinev1 holds the interface of the service: the code generated
// from the .proto files beside it, and their description for HTTP.
package leadlinev1

import _ "embed"

//go:embed openapi.json
var openAPI string

// OpenAPI returns the OpenAPI 3.1 description of the HTTP interface, as JSON.
func OpenAPI() string { return openAPI }

// Package configs holds the annotated configurations that are shipped.
package configs

import _ "embed"

// Survey is the survey.toml that `nightsift init` writes.
//
//go:embed survey.toml
var Survey string

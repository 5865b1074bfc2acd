// Package survey runs the nightly job: it knows the survey's configuration,
// finds frames and their references, sends each through the stages, remembers
// what is done and collects the results.
package survey

import (
	"crypto/sha256"
	"encoding/hex"
	"encoding/json"
	"errors"
	"fmt"
	"os"
	"path/filepath"
	"slices"
	"strings"

	"github.com/pelletier/go-toml/v2"

	"nightsift/align"
	"nightsift/catalog"
	"nightsift/detect"
	"nightsift/internal/cosmology"
	"nightsift/internal/fits"
	"nightsift/internal/frame"
	"nightsift/internal/frame/load"
	"nightsift/internal/minorplanets"
	"nightsift/internal/photometry"
	"nightsift/internal/realbogus"
	"nightsift/subtract"
)

// ConfigName is the name of the configuration inside a survey folder.
const ConfigName = "survey.toml"

// Config is what survey.toml says. DefaultConfig gives the values in use when
// a key is absent.
type Config struct {
	Survey struct {
		Name         string  `toml:"name" comment:"Name of the survey, shown in reports."`
		Prefix       string  `toml:"designation_prefix" comment:"Letters before the position in an object's designation."`
		LongitudeDeg float64 `toml:"longitude_deg" comment:"Longitude of the site, degrees, east positive: a night runs from local noon to noon."`
	} `toml:"survey"`

	Folders struct {
		Incoming   string `toml:"incoming" comment:"Where new frames arrive; searched with all sub-folders. Relative to this file."`
		References string `toml:"references" comment:"Where the deep references are kept, one for each field and filter."`
		Nights     string `toml:"nights" comment:"Where results go, one folder a night."`
		Store      string `toml:"store" comment:"The catalogue: an SQLite file, or the URL of a PostgreSQL database (postgres://user@host/database)."`
	} `toml:"folders"`

	Keywords struct {
		Gain       []string `toml:"gain" comment:"Header keywords, tried in order. An empty list means the common ones."`
		ReadNoise  []string `toml:"read_noise"`
		Saturation []string `toml:"saturation"`
		Exposure   []string `toml:"exposure"`
		Time       []string `toml:"time"`
		Filter     []string `toml:"filter"`
		Field      []string `toml:"field"`
		ZeroPoint  []string `toml:"zero_point"`
		ZeroPointS []string `toml:"zero_point_per_second"`
		Airmass    []string `toml:"airmass"`
		PixelScale []string `toml:"pixel_scale"`
		RA         []string `toml:"ra"`
		Dec        []string `toml:"dec"`
	} `toml:"keywords" comment:"Which header keywords hold what."`

	Planes struct {
		Variance string `toml:"variance" comment:"Name of the extension with the variance, count²; {hdu} stands for the image's own name."`
		Error    string `toml:"error" comment:"Name of an extension with the standard deviation, count, instead of a variance; empty for none."`
		Mask     string `toml:"mask" comment:"Name of the extension with a mask, not zero where a pixel must not be used; empty for none."`
		MaskBits uint64 `toml:"mask_bits" comment:"Only these bits of the mask count; 0 means all."`

		MaskSaturated uint64 `toml:"mask_saturated" comment:"Bits of the mask, added up, that stand for a flag of its own; they need not be in mask_bits."`
		MaskBleed     uint64 `toml:"mask_bleed"`
		MaskBadColumn uint64 `toml:"mask_bad_column"`
		MaskCosmicRay uint64 `toml:"mask_cosmic_ray"`
		MaskStreak    uint64 `toml:"mask_streak"`
		MaskNoData    uint64 `toml:"mask_no_data"`
	} `toml:"planes"`

	Photometry struct {
		Catalogue       string  `toml:"catalogue" comment:"Stars with known magnitudes, for the zero points: text with separated values or a FITS table; empty for none."`
		RA              string  `toml:"ra" comment:"Its columns. Right ascension, declination: deg, ICRS."`
		Dec             string  `toml:"dec"`
		Mag             any     `toml:"mag" comment:"One column, or one for each filter: { r = \"rmag\" }."`
		MagErr          any     `toml:"mag_err" comment:"The same for the errors; empty for none."`
		Colour          any     `toml:"colour" comment:"A column, or two whose difference it is; empty for none."`
		PMRA            string  `toml:"pm_ra" comment:"Proper motion, mas/yr, with the factor cos(dec); empty for none."`
		PMDec           string  `toml:"pm_dec"`
		Epoch           any     `toml:"epoch" comment:"Julian year of the positions, or the column of it."`
		ColourTerm      any     `toml:"colour_term" comment:"A number, \"fit\", or one for each filter."`
		SourceColour    float64 `toml:"source_colour" comment:"Colour of the sources for which magnitudes hold."`
		ToleranceArcsec float64 `toml:"tolerance_arcsec" comment:"By how much positions may disagree."`
		MinStars        int     `toml:"min_stars" comment:"Fewest stars for a zero point."`
		MaxScatter      float64 `toml:"max_scatter" comment:"mag, largest scatter of the stars beyond their errors."`
	} `toml:"photometry"`

	Fixed map[string]any `toml:"fixed" comment:"Values that hold for every frame whatever its header says: gain, read_noise, saturation, zero_point, filter, field."`

	Subtract struct {
		Method string `toml:"method" comment:"How the reference is taken away: kernel, proper, or auto, which takes the one that leaves less on the frame itself."`
		Kernel string `toml:"kernel" comment:"What the matching kernel is made of: gaussian, pixel (regularised), or auto, which takes the one that predicts held-out stars better."`
	} `toml:"subtract"`

	Search struct {
		ThresholdSigma float64 `toml:"threshold_sigma" comment:"Least significance of a candidate, either sign."`
		RealPerMpx     float64 `toml:"real_sources_per_megapixel" comment:"Expected number of real new sources in a megapixel; real_probability is calibrated with it."`
		Model          string  `toml:"model" comment:"The real/bogus model, a file that \"nightsift train\" wrote, relative to this file; empty: the one that comes with the program."`
		Keep           string  `toml:"keep" comment:"Products kept for each frame: none, difference or aligned (both)."`
		Compress       string  `toml:"compress" comment:"How their planes are compressed: none, rice (integers RICE_1, floats GZIP_2) or gzip (all GZIP_2). Lossless without quantise."`
		Quantise       float64 `toml:"quantise" comment:"Steps for one standard deviation of a row's noise to which compressed floats are rounded; 0 for none: bit for bit."`
		AnyFilter      bool    `toml:"any_filter" comment:"Accept a reference of another filter."`
		Efficiency     int     `toml:"efficiency" comment:"Artificial sources put into a copy of each frame to measure what is missed; 0 means none."`
		Distortion     string  `toml:"distortion" comment:"Convention in which products hold the fitted distortion: sip or tpv."`
	} `toml:"search"`

	Cosmology struct {
		H0          float64 `toml:"h0" comment:"km/s/Mpc, for distances; the universe is flat."`
		OmegaMatter float64 `toml:"omega_matter"`
	} `toml:"cosmology"`

	Crossmatch []CrossmatchConfig `toml:"crossmatch" comment:"The user's catalogues of stars, galaxies, variables and active nuclei."`

	MinorPlanets struct {
		Elements       string  `toml:"elements" comment:"File of orbital elements, relative to this file; empty for none."`
		LatitudeDeg    any     `toml:"latitude_deg" comment:"Geodetic latitude of the site, degrees, north positive; its longitude stands under [survey]."`
		HeightM        float64 `toml:"height_m" comment:"Height of the site above the ellipsoid, m."`
		RadiusArcsec   float64 `toml:"radius_arcsec" comment:"A detection may be so far from a predicted place, and three errors."`
		MaxErrorArcsec float64 `toml:"max_error_arcsec" comment:"A minor planet whose place is known worse names nothing."`

		Station            string  `toml:"station" comment:"For the exchange of astrometry: the observatory's code, who sends, and with what."`
		Submitter          string  `toml:"submitter"`
		Observers          string  `toml:"observers" comment:"Names, parted by commas."`
		Measurers          string  `toml:"measurers"`
		TelescopeDesign    string  `toml:"telescope_design"`
		TelescopeApertureM float64 `toml:"telescope_aperture_m"`
		Detector           string  `toml:"detector"`
	} `toml:"minor_planets"`

	Run struct {
		Jobs      int     `toml:"jobs" comment:"Frames worked on at once; 0 means one for each core."`
		MemoryGiB float64 `toml:"memory_gib" comment:"Memory that the frames in flight may take together; 0 means half of the machine's."`
	} `toml:"run"`

	model *realbogus.Model // of Search.Model; nil: the shipped one
}

// DefaultConfig returns the configuration of a fresh survey.
func DefaultConfig() Config {
	var c Config
	c.Survey.Name = "unnamed survey"
	c.Survey.Prefix = "NS"
	c.Folders.Incoming = "incoming"
	c.Folders.References = "references"
	c.Folders.Nights = "nights"
	c.Folders.Store = catalog.FileName
	c.Planes.Variance = load.DefaultKeywords().Variance
	c.Photometry.RA, c.Photometry.Dec, c.Photometry.Mag = "ra", "dec", "mag"
	c.Photometry.MagErr, c.Photometry.Colour, c.Photometry.Epoch, c.Photometry.ColourTerm = "", "", 2000.0, 0.0
	match := photometry.DefaultMatchConfig()
	c.Photometry.ToleranceArcsec, c.Photometry.MinStars, c.Photometry.MaxScatter = match.Tolerance, match.Settings.MinStars, match.Settings.MaxScatter
	c.Subtract.Method = subtract.DefaultConfig().Method
	c.Subtract.Kernel = subtract.DefaultConfig().KernelBasis
	c.Cosmology.H0, c.Cosmology.OmegaMatter = cosmology.Default().H0, cosmology.Default().OmegaMatter
	minor := minorplanets.DefaultLimits()
	c.MinorPlanets.LatitudeDeg, c.MinorPlanets.RadiusArcsec, c.MinorPlanets.MaxErrorArcsec = "", minor.Radius, minor.MaxError
	c.MinorPlanets.TelescopeDesign, c.MinorPlanets.Detector = "Reflector", "CCD"
	c.Search.ThresholdSigma = 5
	c.Search.RealPerMpx = detect.DefaultConfig().Rates.RealPerMpx
	c.Search.Keep = KeepDifference
	c.Search.Compress = fits.CompressNone
	c.Search.Distortion = align.DefaultConfig().Distortion
	return c
}

// The values of Search.Keep.
const (
	KeepNone       = "none"
	KeepDifference = "difference"
	KeepAligned    = "aligned"
)

// ConfigError is a mistake in survey.toml, with the place and the remedy.
type ConfigError struct{ Message string }

func (e *ConfigError) Error() string { return e.Message }

// LoadConfig reads the configuration of a survey folder.
func LoadConfig(dir string) (Config, error) {
	path := filepath.Join(dir, ConfigName)
	data, err := os.ReadFile(path)
	if err != nil {
		if errors.Is(err, os.ErrNotExist) {
			return Config{}, &ConfigError{fmt.Sprintf("%s: no such file; `nightsift init %s` makes a survey folder", path, dir)}
		}
		return Config{}, err
	}
	c, err := ParseConfig(path, data)
	if err == nil {
		err = c.loadModel(path, dir)
	}
	if p := &c.Photometry.Catalogue; *p != "" && !filepath.IsAbs(*p) {
		*p = filepath.Join(dir, *p)
	}
	return c, err
}

// loadModel reads the real/bogus model that the configuration names.
func (c *Config) loadModel(path, dir string) error {
	if c.Search.Model == "" {
		return nil
	}
	if !filepath.IsAbs(c.Search.Model) {
		c.Search.Model = filepath.Join(dir, c.Search.Model)
	}
	m, err := realbogus.Load(c.Search.Model)
	if err != nil {
		return &ConfigError{fmt.Sprintf("%s: search.model: %v; leave the key empty for the model that comes with the program", path, err)}
	}
	c.model = m
	return nil
}

// Model returns the real/bogus model in use.
func (c *Config) Model() (*realbogus.Model, error) {
	if c.model != nil {
		return c.model, nil
	}
	return realbogus.Shipped()
}

// ParseConfig reads a configuration from the bytes of the file named path.
func ParseConfig(path string, data []byte) (Config, error) {
	c := DefaultConfig()
	d := toml.NewDecoder(strings.NewReader(string(data))).DisallowUnknownFields()
	if err := d.Decode(&c); err != nil {
		var strict *toml.StrictMissingError
		if errors.As(err, &strict) {
			return c, &ConfigError{fmt.Sprintf("%s: unknown key:\n%s", path, strict.String())}
		}
		var bad *toml.DecodeError
		if errors.As(err, &bad) {
			row, column := bad.Position()
			return c, &ConfigError{fmt.Sprintf("%s:%d:%d: %s\n%s", path, row, column, bad.Error(), bad.String())}
		}
		return c, &ConfigError{fmt.Sprintf("%s: %v", path, err)}
	}
	return c, c.validate(path)
}

func (c *Config) validate(path string) error {
	wrong := func(key string, found any, want string) error {
		return &ConfigError{fmt.Sprintf("%s: %s = %v: want %s", path, key, found, want)}
	}
	switch {
	case !slices.Contains(subtract.Bases(), c.Subtract.Kernel):
		return wrong("subtract.kernel", fmt.Sprintf("%q", c.Subtract.Kernel), "one of "+strings.Join(subtract.Bases(), ", "))
	case !slices.Contains(subtract.Methods(), c.Subtract.Method):
		return wrong("subtract.method", fmt.Sprintf("%q", c.Subtract.Method), "one of "+strings.Join(subtract.Methods(), ", "))
	case !(c.Search.ThresholdSigma >= 3 && c.Search.ThresholdSigma <= 100):
		return wrong("search.threshold_sigma", c.Search.ThresholdSigma, "3 to 100")
	case !(c.Search.RealPerMpx > 0 && c.Search.RealPerMpx <= 1e5):
		return wrong("search.real_sources_per_megapixel", c.Search.RealPerMpx, "more than 0, at most 100000")
	case c.Search.Keep != KeepNone && c.Search.Keep != KeepDifference && c.Search.Keep != KeepAligned:
		return wrong("search.keep", c.Search.Keep, "none, difference or aligned")
	case c.Search.Distortion != align.DistortionSIP && c.Search.Distortion != align.DistortionTPV:
		return wrong("search.distortion", c.Search.Distortion, "sip or tpv")
	case c.Search.Efficiency < 0 || c.Search.Efficiency > 100000:
		return wrong("search.efficiency", c.Search.Efficiency, "0 to 100000")
	case c.Run.Jobs < 0:
		return wrong("run.jobs", c.Run.Jobs, "0 or more")
	case c.Run.MemoryGiB < 0:
		return wrong("run.memory_gib", c.Run.MemoryGiB, "0 or more")
	case !(c.Survey.LongitudeDeg >= -360 && c.Survey.LongitudeDeg <= 360):
		return wrong("survey.longitude_deg", c.Survey.LongitudeDeg, "-360 to 360")
	}
	for key, folder := range map[string]string{"incoming": c.Folders.Incoming, "references": c.Folders.References, "nights": c.Folders.Nights, "store": c.Folders.Store} {
		if strings.TrimSpace(folder) == "" {
			return wrong("folders."+key, `""`, "a path")
		}
	}
	if err := c.compression().Check(); err != nil {
		return &ConfigError{fmt.Sprintf("%s: search.%v", path, err)}
	}
	if _, err := c.LoadKeywords(); err != nil {
		return &ConfigError{fmt.Sprintf("%s: %v", path, err)}
	}
	if err := c.Universe().Check(); err != nil {
		return &ConfigError{fmt.Sprintf("%s: cosmology.%v", path, err)}
	}
	if key, want := c.crossmatches(); key != "" {
		return &ConfigError{fmt.Sprintf("%s: %s: want %s", path, key, want)}
	}
	if _, key, want := c.minorPlanets(); key != "" {
		return &ConfigError{fmt.Sprintf("%s: minor_planets.%s: want %s", path, key, want)}
	}
	if _, key, want := c.standards(); key != "" {
		return wrong("photometry."+key, c.photometryValue(key), want)
	}
	return nil
}

// compression is how products are written.
func (c *Config) compression() fits.Compression {
	return fits.Compression{Method: c.Search.Compress, Quantise: c.Search.Quantise}
}

// LoadKeywords returns the header mapping.
func (c *Config) LoadKeywords() (load.Keywords, error) {
	k := load.DefaultKeywords()
	set := func(dst *[]string, v []string) {
		if len(v) > 0 {
			*dst = v
		}
	}
	set(&k.Gain, c.Keywords.Gain)
	set(&k.ReadNoise, c.Keywords.ReadNoise)
	set(&k.Saturation, c.Keywords.Saturation)
	set(&k.Exposure, c.Keywords.Exposure)
	set(&k.Time, c.Keywords.Time)
	set(&k.Filter, c.Keywords.Filter)
	set(&k.Field, c.Keywords.Field)
	set(&k.ZeroPoint, c.Keywords.ZeroPoint)
	set(&k.ZeroPointPerSecond, c.Keywords.ZeroPointS)
	set(&k.Airmass, c.Keywords.Airmass)
	set(&k.PixelScale, c.Keywords.PixelScale)
	set(&k.RA, c.Keywords.RA)
	set(&k.Dec, c.Keywords.Dec)
	k.Fixed = c.Fixed
	k.Variance, k.Error, k.Mask, k.MaskBits = c.Planes.Variance, c.Planes.Error, c.Planes.Mask, c.Planes.MaskBits
	k.MaskFlags = map[frame.Flag]uint64{
		frame.Saturated: c.Planes.MaskSaturated, frame.Bleed: c.Planes.MaskBleed, frame.BadColumn: c.Planes.MaskBadColumn,
		frame.CosmicRay: c.Planes.MaskCosmicRay, frame.Streak: c.Planes.MaskStreak, frame.NoData: c.Planes.MaskNoData,
	}
	return k, k.Check()
}

// stages are the configurations of the stages.
type stages struct {
	align    align.Config
	subtract subtract.Config
	detect   detect.Config
}

func (c *Config) stages(workers int) stages {
	s := stages{align: align.DefaultConfig(), subtract: subtract.DefaultConfig(), detect: detect.DefaultConfig()}
	s.align.Workers, s.subtract.Workers = workers, workers
	s.align.AnyFilter, s.align.Distortion = c.Search.AnyFilter, c.Search.Distortion
	s.subtract.Method = c.Subtract.Method
	s.subtract.KernelBasis = c.Subtract.Kernel
	s.detect.Threshold = c.Search.ThresholdSigma
	s.detect.Rates.RealPerMpx = c.Search.RealPerMpx
	s.detect.Longitude = c.Survey.LongitudeDeg
	s.detect.Model = c.model
	return s
}

// StageConfigs returns what the stages are told when this many goroutines may
// work for them.
func (c *Config) StageConfigs(workers int) (align.Config, subtract.Config, detect.Config) {
	s := c.stages(workers)
	return s.align, s.subtract, s.detect
}

// Digest names the part of the configuration on which results depend. Two
// runs with equal digests and inputs give equal candidates.
func (c *Config) Digest() string {
	d := *c
	d.Run.Jobs, d.Run.MemoryGiB = 0, 0
	d.Survey.Name, d.Survey.Prefix, d.Search.Keep = "", "", ""
	// What is known of a place does not change what was found there.
	d.Cosmology, d.Crossmatch, d.MinorPlanets = Config{}.Cosmology, nil, Config{}.MinorPlanets
	d.Search.Compress, d.Search.Quantise = "", 0 // of the products only
	d.Folders.Incoming, d.Folders.References, d.Folders.Nights, d.Folders.Store = "", "", "", ""
	// Candidates change with the model, wherever it lies.
	if m, err := c.Model(); err == nil {
		d.Search.Model = m.Digest
	}
	if d.Photometry.Catalogue != "" {
		d.Photometry.Catalogue = catalogueDigest(d.Photometry.Catalogue)
	}
	data, err := json.Marshal(d)
	if err != nil {
		panic("survey: configuration cannot be written as JSON: " + err.Error())
	}
	sum := sha256.Sum256(data)
	return hex.EncodeToString(sum[:8])
}

// Validate reports the first value that is out of range.
func (c *Config) Validate() error { return c.validate("configuration") }

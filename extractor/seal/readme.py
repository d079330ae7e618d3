"""README.txt of a bundle. Nothing signs it, so it belongs to the format: `verify` demands exactly this text."""

README = """\
AUDIT BUNDLE OF A BELLASSAY RUN, format 1

Keep this file as secret as report.json says: unless the declaration allowed publication, tally and digests in here
tell about the bits.

FILES
  report.json        the audit report: declaration, records, score, certificate, seed, output, ledger entries, cautions
  report.note        signed note (C2SP signed-note, Ed25519) over "bellassay report 1" and the SHA-256 of report.json
  declaration.json   what was fixed before the rounds existed
  certificate.json   what is stated, and under which assumptions
  ledger.json        this run's ledger entries, an inclusion proof (RFC 9162) for each, and one signed checkpoint
  key.txt            verifier key: name+id+base64(0x01 and the 32 bytes of the Ed25519 public key)
  SHA256SUMS         SHA-256 of all other files
All JSON is canonical (RFC 8785): one value, one byte string.

CHECK EVERYTHING
  bellassay verify BUNDLE.zip --key KEY
KEY is the verifier key, obtained from somewhere else than this bundle. With the round files, the seed, the bits and
their salt at hand, give them too: then the tally is counted again and the bits are extracted again. The check needs no
network and nobody's cooperation.

CHECK SOME OF IT WITH COMMON TOOLS (sh, coreutils, openssl 3)
  sha256sum -c SHA256SUMS
  head -n 2 report.note > signed.txt
  { printf 'bellassay report 1\\n'; sha256sum report.json | cut -c 1-64; } | cmp - signed.txt
  tail -n 1 report.note | cut -d ' ' -f 3 | base64 -d | tail -c 64 > signature.bin
  { printf '\\060\\052\\060\\005\\006\\003\\053\\145\\160\\003\\041\\000'
    cut -d + -f 3- key.txt | base64 -d | tail -c 32; } > key.der
  openssl pkeyutl -verify -pubin -keyform DER -inkey key.der -rawin -in signed.txt -sigfile signature.bin

WHAT EACH CHECK PROVES, AND WHAT IT DOES NOT
  archive and SHA256SUMS   No byte changed since the bundle was made. Not who made it: anybody can make sums.
  signature on the report  The holder of the key issued exactly this report. Not whose key it is: compare key.txt with
                           a copy that reached you in another way.
  inclusion proofs         Each entry is in the ledger of the signed checkpoint, at its place. Not that others are shown
                           the same ledger: compare checkpoints with others, and ask the ledger for a consistency proof
                           from any checkpoint you kept. Not that the ledger holds no further entry about this run,
                           such as a second seal: read through it.
  order of the entries     Declaration before seal, seal before certificate and seed: nothing was chosen after the
                           rounds were seen. The order is proved; the clock times are the service's word.
  commitments              Records and certificate are those committed to in the public ledger at that place.
  certificate              Its length follows from declaration and tally by the published formulas, recomputed. Not
                           that the tally is that of the rounds: for that, give the rounds.
  rounds                   Tally and digest are those of the rounds. Not that the rig was what it was declared to be,
                           nor that every round it ran was recorded.
  rounds, seed and bits    The bits are the declared hash of the rounds. Not that the seed was uniform and unknown
                           before sealing.
The assumptions listed in certificate.json are not proved by any of this: a referee has to accept or reject them. Score
and diagnostics are there to be read; they certify nothing, and neither do statistical tests of the bits.
"""

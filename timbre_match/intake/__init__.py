"""File or live blocks to recordings, held notes and cycles."""

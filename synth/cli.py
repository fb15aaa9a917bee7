def main() -> None:
    raise SystemExit(3)

from faked_jobs import oakum_fixture

__all__ = ["oakum_fixture"]

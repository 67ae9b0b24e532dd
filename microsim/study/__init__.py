"""The study room: text and data files -> Study -> BoundStudy.

``load.load_study`` reads and checks, ``bind.bind`` puts numbers in, ``fit_task.fit_tasks`` and ``pathway.pathway`` say
what is to be fitted and drawn. Import them from their modules, so that engines never pay for the schema.
"""
